# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Bring a camera in a robot's hand back to a view it was shown."""

__version__ = '0.1.0'
