# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Drivers without a ROS graph: preflight, replay, benchmarks and the tables of the documents."""
