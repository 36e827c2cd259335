# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A rig for trials: real nodes in real processes, and an observer of the commands in this one.

Used by the drill and by the tests. Each rig has a domain of its own and stays on this machine.
"""

from __future__ import annotations

import contextlib
import os
import pathlib
import signal
import subprocess
import sys
import tempfile
import threading
import time
import typing
from collections.abc import Callable, Mapping, Sequence
from importlib import metadata

import rclpy
from rcl_interfaces.srv import SetParametersAtomically
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.parameter import Parameter

from servo_nodes.ros.demo_processes import dds_profile
from servo_nodes.values import SECOND_NS

NAMESPACE = '/servo'
# The rclpy of Kilted, whose middleware warns of the variable's old name.
RENAMED_IN = 9
ASK_AGAIN_S = 2.0
FIND_AGAIN_S = 5.0
ROOT = pathlib.Path(__file__).resolve().parents[2]


def transport() -> dict[str, str]:
    """Return the environment in which images get through and no listener blocks a publisher."""
    profile = dds_profile()
    found = {'RMW_FASTRTPS_PUBLICATION_MODE': 'ASYNCHRONOUS'}
    if profile is not None:
        found['FASTDDS_DEFAULT_PROFILES_FILE'] = str(profile)
        if int(metadata.version('rclpy').split('.')[0]) < RENAMED_IN:
            found['FASTRTPS_DEFAULT_PROFILES_FILE'] = str(profile)
    return found


class Child:
    """A node in a process of its own; what it says is kept in a file.

    Parameters
    ----------
    node : str, `tracker`, `controller` or `simulator`
    env : mapping, the environment
    log : path of the file
    arguments : ROS arguments after `--ros-args`
    code : str, what to run instead of the node's `main`
    """

    def __init__(self, node: str, env: Mapping[str, str], log: pathlib.Path,
                 arguments: Sequence[str] = (), code: str = '') -> None:
        self.node, self.log = node, log
        code = code or f'from servo_nodes.ros.{node}_node import main; main()'
        with log.open('ab') as file:
            self._process = subprocess.Popen(
                [sys.executable, '-c', code, '--ros-args', *arguments], env=dict(env),
                stdout=file, stderr=subprocess.STDOUT, stdin=subprocess.DEVNULL)

    @property
    def pid(self) -> int:
        """Return the process's number."""
        return self._process.pid

    @property
    def runs(self) -> bool:
        """Return whether the process is alive."""
        return self._process.poll() is None

    def send(self, number: signal.Signals) -> None:
        """Send a signal."""
        self._process.send_signal(number)

    def end(self, number: signal.Signals = signal.SIGINT, timeout: float = 5.0) -> int:
        """Send a signal and return the exit code; kill what does not listen."""
        if self.runs:
            self.send(signal.SIGCONT)
            self.send(number)
        try:
            return self._process.wait(timeout)
        except subprocess.TimeoutExpired:
            self._process.kill()
            return self._process.wait(timeout)

    def wait(self, timeout: float) -> int:
        """Return the exit code of a process that ends by itself."""
        return self._process.wait(timeout)

    def said(self) -> str:
        """Return what it has printed so far."""
        return self.log.read_text(errors='replace')


class Rig:
    """Children, and a node of our own that watches and talks to them.

    Parameters
    ----------
    domain : int, ROS domain
    env : mapping, additions to the environment of the children
    """

    def __init__(self, domain: int, env: Mapping[str, str] | None = None) -> None:
        paths = [str(ROOT), *filter(None, [os.environ.get('PYTHONPATH')])]
        self._env = {**os.environ, 'ROS_DOMAIN_ID': str(domain), 'PYTHONUNBUFFERED': '1',
                     'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST',
                     'PYTHONPATH': os.pathsep.join(paths), **transport(), **(env or {})}
        os.environ['ROS_AUTOMATIC_DISCOVERY_RANGE'] = 'LOCALHOST'
        for name, value in transport().items():
            os.environ.setdefault(name, value)
        self._folder = tempfile.TemporaryDirectory(prefix='servo_rig_')
        self.folder = pathlib.Path(self._folder.name)
        self.children: list[Child] = []
        self._context = Context()
        rclpy.init(context=self._context, domain_id=domain)
        self.node = Node('observer', context=self._context, namespace=NAMESPACE)
        self._executor = SingleThreadedExecutor(context=self._context)
        self._executor.add_node(self.node)
        self.ear = Node('ear', context=self._context, namespace=NAMESPACE)
        self._listener = SingleThreadedExecutor(context=self._context)
        self._listener.add_node(self.ear)
        self._clients: dict[str, typing.Any] = {}
        self._ended = False
        self._thread = threading.Thread(target=self._listen, name='ear', daemon=True)
        self._thread.start()

    def __enter__(self) -> Rig:
        return self

    def __exit__(self, *error: object) -> None:
        self.close()

    def close(self) -> None:
        """End the children, then ourselves."""
        for child in reversed(self.children):
            child.end()
        self._ended = True
        self._thread.join(1.0)
        for executor in (self._executor, self._listener):
            executor.shutdown(timeout_sec=1.0)
        self.ear.destroy_node()
        self.node.destroy_node()
        rclpy.try_shutdown(context=self._context)
        self._folder.cleanup()

    def start(self, node: str, *, namespace: str = NAMESPACE,
              remap: Mapping[str, str] | None = None, arguments: Sequence[str] = (),
              env: Mapping[str, str] | None = None, code: str = '',
              **parameters: object) -> Child:
        """Start a node, or `code` under its name; `__` stands for each dot of a parameter."""
        given = ['-r', f'__ns:={namespace}']
        for old, new in (remap or {}).items():
            given += ['-r', f'{old}:={new}']
        for name, value in parameters.items():
            given += ['-p', f'{name.replace("__", ".")}:={_written(value)}']
        log = self.folder / f'{node}_{len(self.children)}.log'
        child = Child(node, {**self._env, **(env or {})}, log,
                      [*given, *arguments], code)
        self.children.append(child)
        return child

    def _listen(self) -> None:
        """Spin `ear`, whose subscriptions note when messages come, whatever we are busy with."""
        # An instrument must not wait for what it measures; where that is not permitted, it does.
        with contextlib.suppress(OSError):
            os.setpriority(os.PRIO_PROCESS, threading.get_native_id(), -15)
        while not self._ended:
            self._listener.spin_once(timeout_sec=0.1)

    def spin(self, seconds: float = 0.02) -> None:
        """Let messages in, for at most so long."""
        self._executor.spin_once(timeout_sec=seconds)

    def until(self, ready: Callable[[], typing.Any], timeout: float = 10.0, *,
              what: str = 'a condition') -> typing.Any:
        """Let messages in until `ready` says something true, which is returned.

        Raises
        ------
        TimeoutError
            When it does not within `timeout` seconds.
        """
        end = time.monotonic_ns() + round(timeout * SECOND_NS)
        while not (found := ready()):
            if time.monotonic_ns() > end:
                raise TimeoutError(f'expected {what} within {timeout:g} s, got nothing')
            self.spin()
        return found

    def watch(self, seconds: float) -> None:
        """Let messages in for so long."""
        end = time.monotonic_ns() + round(seconds * SECOND_NS)
        while (left := end - time.monotonic_ns()) > 0:
            self.spin(left / SECOND_NS)

    def set(self, node: str, **parameters: object) -> list[str]:
        """Set parameters of a node, whole or not at all; return what it refuses and why."""
        changes = [Parameter(name.replace('__', '.'),
                             value=list(value) if isinstance(value, tuple) else value)
                   for name, value in parameters.items()]
        answer = self.call(SetParametersAtomically, f'{node}/set_parameters_atomically',
                           SetParametersAtomically.Request(
                               parameters=[change.to_parameter_msg() for change in changes]))
        return [] if answer.result.successful else [answer.result.reason]

    def call(self, kind: type, name: str, request: typing.Any = None,
             timeout: float = 30.0) -> typing.Any:
        """Call a service and return its answer.

        A killed server stays in the graph for a while; what it does not answer is asked again.
        """
        end = time.monotonic() + timeout
        while True:
            client = self._clients.get(name) or self.node.create_client(kind, name)
            self._clients[name] = client
            try:
                self.until(client.service_is_ready, FIND_AGAIN_S, what=f'service {name}')
                future = client.call_async(kind.Request() if request is None else request)
                self.until(future.done, ASK_AGAIN_S, what=f'an answer of {name}')
                return future.result()
            except TimeoutError:
                self.node.destroy_client(self._clients.pop(name))
                if time.monotonic() > end:
                    raise


def _written(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, (tuple, list)):
        return '[' + ', '.join(_written(item) for item in value) + ']'
    return repr(value) if isinstance(value, float) else str(value)
