# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""From an image to the points of the goal view that it shows."""
