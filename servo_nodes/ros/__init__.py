# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The only room where ROS is spoken: three thin shells, and the tools that are ROS clients."""
