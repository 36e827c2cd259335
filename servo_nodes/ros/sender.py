# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Sends the commands, and lives through a middleware that cannot take one for a moment."""

from __future__ import annotations

import typing

from geometry_msgs.msg import TwistStamped

from servo_nodes import wire
from servo_nodes.values import Twist

MOST_IN_A_ROW = 25


class Sender:
    """Publishes twists as `camera_twist`.

    A command that the middleware refuses is lost, and the next tick brings another: ending the
    node there would take away the very thing that can still send zero. Only when it refuses
    `MOST_IN_A_ROW` of them the error goes on to the caller.

    Parameters
    ----------
    node : Shell
    publisher : of TwistStamped
    """

    def __init__(self, node: typing.Any, publisher: typing.Any) -> None:
        self._node, self._publisher = node, publisher
        self._frame = ''
        self.refused = 0
        self._in_a_row = 0

    def send(self, twist: Twist) -> None:
        """Publish a twist, stamped with the node's clock.

        Raises
        ------
        RuntimeError
            The middleware's own error, when it has refused too many in a row.
        """
        message = TwistStamped()
        self._frame = twist.frame_id
        wire.fill_twist(message, twist, self._node.now_ns())
        try:
            self._publisher.publish(message)
            self._in_a_row = 0
        except RuntimeError as error:
            self.refused += 1
            self._in_a_row += 1
            if self._in_a_row >= MOST_IN_A_ROW:
                raise
            self._node.warn_seldom('send', (
                f'camera_twist: expected the middleware to take every command, got {error} '
                f'({self.refused} lost so far); free a core or end a frozen subscriber'))

    def send_zero(self) -> None:
        """Publish exact rest in the frame of the last twist."""
        self.send(Twist.zero(self._frame))
