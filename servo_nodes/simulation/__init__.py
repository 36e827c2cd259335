# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The instrument: twists in, images out. A robot runs with this folder deleted."""
