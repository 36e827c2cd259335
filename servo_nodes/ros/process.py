# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A node's process: how it is called to an end, and ends at rest.

The middleware's own signal handlers end its context before anybody can send a last zero, so they
are switched off. Ours only write to a pipe that the main thread waits at, whichever thread the
signal hit; the executor runs in a second thread. Whatever ends the process, a signal or an
exception, `rest` is called while the context still lives.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
from collections.abc import Callable

import cv2
import rclpy
from rclpy.executors import ExternalShutdownException, ShutdownException, SingleThreadedExecutor
from rclpy.signals import SignalHandlerOptions

from servo_nodes.ros.shell import Shell

SIGNALS = frozenset((signal.SIGINT, signal.SIGTERM))
LAST_RESORT_S = 0.8


class Call:
    """The call to end: a pipe that signals, and whoever fails, write to."""

    def __init__(self) -> None:
        self._reader, self._writer = os.pipe()
        os.set_blocking(self._writer, False)
        for number in SIGNALS:
            signal.signal(number, _noted)
        signal.set_wakeup_fd(self._writer, warn_on_full_buffer=False)

    def make(self) -> None:
        """Call, from any thread."""
        os.write(self._writer, b'!')

    def wait(self) -> None:
        """Wait for a call."""
        os.read(self._reader, 1)


def _noted(number: int, frame: object) -> None:
    """Do nothing: the byte in the pipe is the message."""


def run(make: Callable[[], Shell], argv: list[str] | None = None) -> int:
    """Run a node to its end; return the exit code: 0 asked to, 1 failed, 2 unusable parameters."""
    call = Call()
    # OpenCV's workers spin while they wait, and take from the other nodes what they save this one.
    cv2.setNumThreads(1)
    try:
        rclpy.init(args=argv, signal_handler_options=SignalHandlerOptions.NO)
        node = make()
    except (ValueError, RuntimeError) as error:
        print(f'{" ".join(str(error).split())}', file=sys.stderr)
        rclpy.try_shutdown()
        return 2
    node.call_end = call.make
    executor = SingleThreadedExecutor()
    executor.add_node(node)
    ended = threading.Event()
    try:
        node.own_process()
        node.start()
    except Exception as error:
        node.fail(error)
    spinner = threading.Thread(target=_spin, args=(executor, node, ended), name='executor',
                               daemon=True)
    spinner.start()
    call.wait()
    return _end(node, executor, spinner, ended)


def _spin(executor: SingleThreadedExecutor, node: Shell, ended: threading.Event) -> None:
    try:
        while not ended.is_set():
            executor.spin_once(timeout_sec=1.0)
    except (ShutdownException, ExternalShutdownException):
        pass
    except Exception as error:
        node.fail(error)


def _end(node: Shell, executor: SingleThreadedExecutor, spinner: threading.Thread,
         ended: threading.Event) -> int:
    """Rest, then take everything down; what hangs is left behind, for launch kills the patient."""
    code = 0 if node.failure is None else 1
    last_resort = threading.Timer(LAST_RESORT_S, os._exit, (code,))
    last_resort.daemon = True
    last_resort.start()
    node.rest()
    ended.set()
    executor.wake()
    spinner.join(0.3)
    sys.stdout.flush()
    sys.stderr.flush()
    if spinner.is_alive():
        os._exit(code)
    executor.shutdown(timeout_sec=0.0)
    node.destroy_node()
    rclpy.try_shutdown()
    last_resort.cancel()
    return code
