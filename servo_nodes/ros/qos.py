# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The quality of service of every topic, as one table.

A subscription may never ask for more than a publisher offers, so inputs ask for little (best
effort, volatile) and outputs offer much (reliable). Images wait in no queue: depth is latency.
The command offers a deadline and a lease, so that an arm's driver that asks for them notices a
dead or hung controller.
"""

from __future__ import annotations

from types import MappingProxyType

from rclpy.duration import Duration
from rclpy.qos import (
    DurabilityPolicy,
    HistoryPolicy,
    LivelinessPolicy,
    QoSProfile,
    ReliabilityPolicy,
)
from rclpy.qos_overriding_options import QoSOverridingOptions

COMMAND_LIFESPAN = Duration(nanoseconds=200_000_000)
COMMAND_DEADLINE = Duration(nanoseconds=100_000_000)
COMMAND_LEASE = Duration(nanoseconds=300_000_000)


def _profile(*, reliable: bool, depth: int = 1, latched: bool = False,
             **more: object) -> QoSProfile:
    return QoSProfile(
        history=HistoryPolicy.KEEP_LAST, depth=depth,
        reliability=ReliabilityPolicy.RELIABLE if reliable else ReliabilityPolicy.BEST_EFFORT,
        durability=DurabilityPolicy.TRANSIENT_LOCAL if latched else DurabilityPolicy.VOLATILE,
        **more)


# (direction, topic): what our side of it asks for or offers.
PROFILES = MappingProxyType({
    ('in', 'image'): _profile(reliable=False),
    ('in', 'image/compressed'): _profile(reliable=False),
    ('in', 'depth'): _profile(reliable=False),
    ('in', 'camera_info'): _profile(reliable=False),
    ('in', 'features'): _profile(reliable=False),
    ('in', 'camera_twist'): _profile(reliable=True),
    ('in', '~/halt'): _profile(reliable=True, depth=10),
    ('in', '~/heartbeat'): _profile(reliable=False, depth=1),
    ('in', 'input'): _profile(reliable=False),
    ('out', 'output'): _profile(reliable=True),
    ('out', 'image'): _profile(reliable=True),
    ('out', 'depth'): _profile(reliable=True),
    ('out', 'camera_info'): _profile(reliable=True),
    ('out', 'true_pose'): _profile(reliable=True),
    ('out', 'features'): _profile(reliable=True),
    ('out', '~/overlay'): _profile(reliable=False),
    ('out', '~/overlay/compressed'): _profile(reliable=False),
    ('out', 'camera_twist'): _profile(
        reliable=True, lifespan=COMMAND_LIFESPAN, deadline=COMMAND_DEADLINE,
        liveliness=LivelinessPolicy.AUTOMATIC, liveliness_lease_duration=COMMAND_LEASE),
    ('out', '~/state'): _profile(reliable=True, latched=True),
    ('out', '~/error_px'): _profile(reliable=True),
    ('out', '~/condition'): _profile(reliable=True),
    ('out', '~/latency_ms'): _profile(reliable=True),
    ('out', '/diagnostics'): _profile(reliable=True, depth=5),
    ('out', '/clock'): _profile(reliable=False),
})


def overridable() -> QoSOverridingOptions:
    """Return the options that let `qos_overrides` parameters change a topic's profile."""
    return QoSOverridingOptions.with_default_policies()
