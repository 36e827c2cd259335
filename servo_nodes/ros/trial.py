# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A trial: the whole loop in three processes, taught at home, sent away, engaged, moving."""

from __future__ import annotations

import typing
from collections.abc import Mapping

from std_srvs.srv import Trigger

from servo_nodes.ros.observer import Observer
from servo_nodes.ros.rig import Child, Rig

HOME_DISTANCE = 0.42
AWAY = {'start__translation': (0.05, -0.03, -0.06), 'start__rotation': (0.0, 0.0, 0.08)}
FAR = {'start__translation': (0.10, 0.05, -0.20), 'start__rotation': (0.0, 0.0, 0.25)}


class Trial:
    """Simulator, tracker and controller on a rig, and an observer.

    Parameters
    ----------
    rig : Rig
    controller, tracker, simulator : parameters of the nodes, `__` for each dot
    remap : mapping of node to its remaps
    env : mapping of node to additions to its environment
    code : mapping of node to what runs in its place
    """

    def __init__(self, rig: Rig, *, controller: Mapping[str, object] | None = None,
                 tracker: Mapping[str, object] | None = None,
                 simulator: Mapping[str, object] | None = None,
                 remap: Mapping[str, Mapping[str, str]] | None = None,
                 env: Mapping[str, Mapping[str, str]] | None = None,
                 code: Mapping[str, str] | None = None) -> None:
        self.rig = rig
        self._given: dict[str, dict[str, typing.Any]] = {
            'simulator': dict(simulator or {}),
            'tracker': {'goal__folder': str(rig.folder / 'goal'),
                        'teach__distance': HOME_DISTANCE, **(tracker or {})},
            'controller': dict(controller or {})}
        self._remap, self._env, self._code = remap or {}, env or {}, code or {}
        self.observer = Observer(rig)
        self.nodes: dict[str, Child] = {}
        for node in self._given:
            self.start(node)

    def start(self, node: str) -> Child:
        """Start a node, or start it again as it was."""
        child = self.rig.start(node, remap=self._remap.get(node), env=self._env.get(node),
                               code=self._code.get(node, ''), **self._given[node])
        self.nodes[node] = child
        return child

    def teach(self, timeout: float = 40.0) -> str:
        """Teach what the camera sees, as soon as it sees anything; return the answer."""
        said = ''

        def done() -> bool:
            nonlocal said
            self.rig.watch(0.1)
            answer = self.rig.call(Trigger, 'tracker/teach')
            said = answer.message
            return bool(answer.success)
        self.rig.until(done, timeout, what='a lesson')
        return said

    def away(self, start: Mapping[str, object] | None = None) -> None:
        """Put the camera to a start, at rest."""
        refusals = self.rig.set('simulator', **(AWAY if start is None else start))
        if refusals:
            raise ValueError(refusals[0])
        self.rig.call(Trigger, 'simulator/restart')

    def engage(self, timeout: float = 10.0) -> None:
        """Engage as soon as the controller agrees.

        Raises
        ------
        TimeoutError
            With the last refusal, when it does not.
        """
        said = ['']

        def done() -> bool:
            answer = self.observer.engage()
            said[0] = answer.message
            if not answer.success:
                self.rig.watch(0.05)
            return bool(answer.success)
        try:
            self.rig.until(done, timeout, what='engaging')
        except TimeoutError as error:
            raise TimeoutError(f'{error}: {said[0]}') from error

    def go(self, start: Mapping[str, object] | None = None) -> None:
        """Go away, engage, and wait until the camera moves."""
        self.away(start)
        self.engage()
        self.rig.until(lambda: self.observer.moves and self.observer.state == 'servoing', 10.0,
                       what='motion')

    def stop(self) -> None:
        """Disengage, and leave whatever fault there is."""
        self.observer.engage(False)
        self.observer.reset()
