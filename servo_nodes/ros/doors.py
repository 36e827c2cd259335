# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A node's publishers, subscriptions and services, opened by the QoS table and closed together."""

from __future__ import annotations

import typing
from collections.abc import Callable

from servo_nodes.ros import qos


class Doors:
    """Opens by name and remembers what to close.

    Relative names that carry data let `qos_overrides` parameters change their profile; the
    node's own (`~/...`) and the absolute ones keep theirs.

    Parameters
    ----------
    node : rclpy.node.Node
    """

    def __init__(self, node: typing.Any) -> None:
        self._node = node
        self._closers: list[tuple[Callable[[typing.Any], object], typing.Any]] = []

    def publish(self, kind: type, name: str) -> typing.Any:
        """Return a publisher of a topic of the table."""
        publisher = self._node.create_publisher(
            kind, name, qos.PROFILES['out', name], qos_overriding_options=_own(name))
        self._closers.append((self._node.destroy_publisher, publisher))
        return publisher

    def listen(self, kind: type, name: str, callback: Callable[[typing.Any], None],
               topic: str | None = None) -> typing.Any:
        """Return a subscription to a topic of the table, which may be found under another name."""
        subscription = self._node.create_subscription(
            kind, topic or name, callback, qos.PROFILES['in', name],
            qos_overriding_options=_own(name))
        self._closers.append((self._node.destroy_subscription, subscription))
        return subscription

    def serve(self, kind: type, name: str, callback: Callable[..., typing.Any]) -> typing.Any:
        """Return a service."""
        service = self._node.create_service(kind, name, callback)
        self._closers.append((self._node.destroy_service, service))
        return service

    def close(self) -> None:
        """Close everything, the newest first."""
        while self._closers:
            destroy, door = self._closers.pop()
            destroy(door)


def _own(name: str) -> typing.Any:
    return None if name.startswith(('~', '/')) else qos.overridable()
