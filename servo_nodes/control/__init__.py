# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""From views of a goal to gated camera twists: laws, gate, states, controller."""
