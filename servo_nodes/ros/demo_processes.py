# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Start nodes as processes that nobody else can reach and that cannot outlive us.

Isolation is threefold: a domain that nobody on this machine uses, discovery that never leaves the
machine, and a namespace that no driver listens in. What could lead out of it (static peers,
discovery servers, foreign profiles) is taken from the environment.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import pathlib
import random
import signal
import socket
import subprocess
import sys
import typing
from collections.abc import Mapping, Sequence
from importlib import metadata

FIRST_DOMAIN, LAST_DOMAIN = 1, 101
LOG_LINES = 8
PATIENCE_S = 3.0
_LEAD_OUT = ('ROS_STATIC_PEERS', 'ROS_DISCOVERY_SERVER', 'ROS_SUPER_CLIENT', 'ROS_LOCALHOST_ONLY',
             'CYCLONEDDS_URI', 'ZENOH_CONFIG_OVERRIDE', 'ZENOH_SESSION_CONFIG_URI',
             'FASTDDS_BUILTIN_TRANSPORTS', 'ROS_NAMESPACE')
_PR_SET_PDEATHSIG = 1
# The second is the older one; later releases still read it, with a warning.
PROFILE_NAMES = ('FASTDDS_DEFAULT_PROFILES_FILE', 'FASTRTPS_DEFAULT_PROFILES_FILE')


class Trouble(RuntimeError):
    """What keeps the tool from its work, in one sentence; `log` holds a node's last lines."""

    def __init__(self, sentence: str, log: Sequence[str] = ()) -> None:
        super().__init__(sentence)
        self.log = tuple(log)


def free_domain(rng: random.Random) -> int:
    """Return a domain id whose first discovery port nobody on this machine holds.

    The port of the first participant is 7400 + 250 * domain + 10 (RTPS 2.5, section 9.6.2.3, from
    memory).
    """
    domains = list(range(FIRST_DOMAIN, LAST_DOMAIN + 1))
    rng.shuffle(domains)
    for domain in domains:
        with contextlib.suppress(OSError), socket.socket(
                socket.AF_INET, socket.SOCK_DGRAM) as probe:
            probe.bind(('127.0.0.1', 7410 + 250 * domain))
            return domain
    raise Trouble('domain: expected a ROS domain that is free on this machine, got none')


def isolated(environment: Mapping[str, str], domain: int) -> dict[str, str]:
    """Return an environment in which nodes meet only on this machine and in this domain."""
    kept = {name: value for name, value in environment.items() if name not in _LEAD_OUT}
    kept |= {'ROS_DOMAIN_ID': str(domain), 'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST',
             'PYTHONUNBUFFERED': '1', 'RCUTILS_COLORIZED_OUTPUT': '0'}
    for name in PROFILE_NAMES:
        kept.pop(name, None)
    profile = dds_profile()
    if profile is not None:
        kept[PROFILE_NAMES[_is_older_than_kilted(environment)]] = str(profile)
    return kept


def _is_older_than_kilted(environment: Mapping[str, str]) -> bool:
    """Return whether the middleware knows its profile by the older name alone."""
    with contextlib.suppress(metadata.PackageNotFoundError):
        return bool(metadata.version('ros-jazzy-rclpy'))
    return environment.get('ROS_DISTRO') in ('humble', 'iron', 'jazzy')


def dds_profile() -> pathlib.Path | None:
    """Return the profile with the larger shared-memory segment, where the package keeps it."""
    package = pathlib.Path(__file__).resolve().parents[2]
    prefixes = [sys.prefix, *os.environ.get('AMENT_PREFIX_PATH', '').split(os.pathsep)]
    places = [package / 'config', *(pathlib.Path(prefix) / 'share' / 'servo_nodes' / 'config'
                                    for prefix in prefixes if prefix)]
    return next((place / 'dds_profile.xml' for place in places
                 if (place / 'dds_profile.xml').is_file()), None)


def executable(name: str) -> list[str]:
    """Return the command that runs one of our nodes: its script beside ours, else its module."""
    beside = pathlib.Path(sys.argv[0]).resolve().parent, pathlib.Path(sys.executable).parent
    for folder in beside:
        script = folder / name
        if script.is_file() and os.access(script, os.X_OK):
            return [str(script)]
    return [sys.executable, '-c', f'from servo_nodes.ros.{name} import main; main()']


class Child:
    """One node as a process; its words go to a log file."""

    def __init__(self, node: str, parameters: Mapping[str, object], *, namespace: str,
                 environment: Mapping[str, str], logs: pathlib.Path) -> None:
        self.node = node
        self.log = logs / f'{node}.log'
        command = [*executable(f'{node}_node'), '--ros-args', '-r', f'__ns:=/{namespace}']
        for name, value in parameters.items():
            command += ['-p', f'{name}:={_yaml(value)}']
        package = str(pathlib.Path(__file__).resolve().parents[2])
        paths = [package, *filter(None, [environment.get('PYTHONPATH')])]
        with self.log.open('wb') as log:
            self._process = subprocess.Popen(
                command, stdin=subprocess.DEVNULL, stdout=log, stderr=subprocess.STDOUT,
                env={**environment, 'PYTHONPATH': os.pathsep.join(paths)}, start_new_session=True,
                preexec_fn=_die_with_parent)

    @property
    def pid(self) -> int:
        """Return the process id."""
        return self._process.pid

    def check(self) -> None:
        """Raise `Trouble` when the process has ended by itself."""
        code = self._process.poll()
        if code is not None:
            raise Trouble(f'{self.node}: expected the node to run, got its end with code {code}; '
                          f'its whole log is {self.log}', self.tail())

    def tail(self) -> list[str]:
        """Return the last lines of the log."""
        with contextlib.suppress(OSError):
            return self.log.read_text(errors='replace').splitlines()[-LOG_LINES:]
        return []

    def ask_to_stop(self) -> None:
        """Send SIGTERM, at which a node comes to rest."""
        if self._process.poll() is None:
            self._process.send_signal(signal.SIGTERM)

    def stop(self) -> None:
        """Wait for the end, and make one when it does not come."""
        try:
            self._process.wait(PATIENCE_S)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()


class Children:
    """Nodes that start one after the other and end together, the controller's zeros first."""

    def __init__(self, *, namespace: str, environment: Mapping[str, str],
                 logs: pathlib.Path) -> None:
        self._start = {'namespace': namespace, 'environment': environment, 'logs': logs}
        self.running: list[Child] = []
        logs.mkdir(parents=True, exist_ok=True)

    def start(self, node: str, parameters: Mapping[str, object]) -> Child:
        """Start one more."""
        child = Child(node, parameters, **self._start)  # type: ignore[arg-type]
        self.running.append(child)
        return child

    def check(self) -> None:
        """Raise `Trouble` when one of them has ended by itself."""
        for child in self.running:
            child.check()

    def stop(self) -> None:
        """End all of them."""
        for child in self.running:
            child.ask_to_stop()
        for child in self.running:
            child.stop()
        self.running.clear()

    def __enter__(self) -> Children:
        return self

    def __exit__(self, *exception: object) -> None:
        self.stop()


def _yaml(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, (tuple, list)):
        return f'[{", ".join(map(_yaml, value))}]'
    if isinstance(value, str):
        return "'" + value.replace("'", "''") + "'"
    return repr(value)


def _load_libc() -> typing.Any:
    return ctypes.CDLL(None, use_errno=True) if sys.platform == 'linux' else None


_LIBC = _load_libc()


def _die_with_parent() -> None:
    """In the child, before it becomes the node: end when the parent is gone, however it went."""
    signal.pthread_sigmask(signal.SIG_SETMASK, ())
    if _LIBC is not None:
        _LIBC.prctl(_PR_SET_PDEATHSIG, signal.SIGKILL)
