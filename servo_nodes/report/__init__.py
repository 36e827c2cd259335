# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A run's record, the pictures drawn from it, and the page that tells what happened."""
