# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Faults between a source and the loop, for images and for views alike.

`Injector` decides: it is told that message number n, stamped so, arrives now, and answers what
goes out, when, under which stamp, and how damaged. It never sees a payload, so the same seed and
the same arrivals give the same faults whatever is sent. `Channel` keeps the payloads for it, and
`damaged_image` and `damaged_view` do the damage.

A message is first dropped or not; then delayed, stamped and damaged; then held back for a
reorder, or sent twice. Delays keep the order of messages, as a queue does; only `reorder` breaks
it.
"""

from __future__ import annotations

import enum
import heapq
import typing
from dataclasses import dataclass, replace

import numpy as np

from servo_nodes.settings import Checked, setting
from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import SECOND_NS, Stamp, View

FOREVER = 1e9
# A held message leaves right after its successor.
_JUST_AFTER_NS = 1
# The second copy of a message follows the first as a retransmission would.
_COPY_AFTER_NS = 1_000_000


def _share(what: str) -> typing.Any:
    return setting(0.0, low=0.0, high=1.0, help=f'share of the messages that {what}')


@dataclass(frozen=True)
class FaultSettings(Checked):
    """What goes wrong on the way from the source to the loop; all off by default."""

    onset: float = setting(0.0, unit='s', low=0.0, high=FOREVER,
                           help='how long after the first message the faults begin')
    duration: float = setting(FOREVER, unit='s', low=0.0, high=FOREVER,
                              help='how long they last from then on')
    delay: float = setting(0.0, unit='s', low=0.0, high=60.0, help='latency of each message')
    jitter: float = setting(0.0, unit='s', low=0.0, high=60.0,
                            help='additional latency, evenly spread from 0 to this')
    drop: float = _share('are lost; 1 is a source that fell silent')
    duplicate: float = _share('are sent twice')
    reorder: float = _share('arrive after their successor')
    freeze: bool = setting(False, help='the last content comes again and again, with new stamps')
    black: float = _share('are black images, or views without points')
    burst: float = _share('are buried in noise')
    burst_noise: float = setting(60.0, unit='grey levels of 255', low=0.0, high=255.0,
                                 help='standard deviation of that noise in images')
    burst_spread: float = setting(0.05, unit='normalised', low=0.0, high=10.0,
                                    help='standard deviation of that noise in points')
    nan: float = _share('carry NaN; images, which cannot, are black instead')
    stamp_offset: float = setting(0.0, unit='s', low=-1e6, high=1e6,
                                  help='added to the stamps; positive: from the future')
    stamp_jump: float = setting(0.0, unit='s', low=0.0, high=60.0,
                                help='how far the stamps of some messages jump back')
    jump: float = _share('have a stamp that jumps back by stamp_jump')
    stamp_zero: float = _share('have a stamp of zero')


class Damage(enum.Enum):
    """What becomes of the content of a message."""

    NONE = 'none'
    BLACK = 'black'
    BURST = 'burst'
    NAN = 'nan'


@dataclass(frozen=True)
class Outcome:
    """One message that comes out.

    Attributes
    ----------
    due : int, ns, when it goes out
    number : int, which message's content it carries, counted from 0 in order of arrival
    stamp : int, ns, the stamp it wears
    damage : Damage
    seed : int, for the noise of the damage
    """

    due: Stamp
    number: int
    stamp: Stamp
    damage: Damage
    seed: int


_DICE = ('drop', 'jitter', 'duplicate', 'reorder', 'stamp_zero', 'jump', 'nan', 'black', 'burst')


class Injector:
    """Decides what comes out of a faulty line.

    Parameters
    ----------
    settings : FaultSettings
        May be exchanged at any time through `settings`.
    rng : numpy.random.Generator
    """

    def __init__(self, settings: FaultSettings, rng: np.random.Generator) -> None:
        self.settings = settings
        self._rng = rng
        self._count = 0
        self._first: Stamp | None = None
        self._last_due: Stamp | None = None
        self._frozen: int | None = None
        self._held: Outcome | None = None

    def take(self, stamp: Stamp, now: Stamp) -> tuple[Outcome, ...]:
        """Say what comes of a message with this stamp that arrives at `now`, both ns."""
        number, self._count = self._count, self._count + 1
        self._first = now if self._first is None else self._first
        # Every message draws the same numbers: one fault does not shift the dice of another.
        dice = dict(zip(_DICE, self._rng.random(len(_DICE)).tolist(), strict=True))
        seed = int(self._rng.integers(2 ** 62))
        if not self._is_active(now):
            self._frozen = None
            return self._released(Outcome(self._in_order(now), number, stamp, Damage.NONE, seed))
        if dice['drop'] < self.settings.drop:
            return ()
        latency = self.settings.delay + dice['jitter'] * self.settings.jitter
        outcome = Outcome(self._in_order(now + round(latency * SECOND_NS)), self._shown(number),
                          self._stamped(stamp, dice), self._damage(dice), seed)
        if dice['reorder'] < self.settings.reorder and self._held is None:
            self._held = outcome
            return ()
        sent = self._released(outcome)
        if dice['duplicate'] < self.settings.duplicate:
            copy = replace(outcome, due=self._in_order(sent[-1].due + _COPY_AFTER_NS))
            return (*sent, copy)
        return sent

    @property
    def oldest_needed(self) -> int:
        """Return the lowest number whose content a later message may still show."""
        needed = [self._count - 1]
        if self._frozen is not None:
            needed.append(self._frozen)
        if self._held is not None:
            needed.append(self._held.number)
        return max(0, min(needed))

    def _is_active(self, now: Stamp) -> bool:
        age = 0 if self._first is None else now - self._first
        since = age / SECOND_NS - self.settings.onset
        return 0 <= since < self.settings.duration

    def _in_order(self, due: Stamp) -> Stamp:
        """Return `due`, but not before what was promised earlier."""
        self._last_due = due if self._last_due is None else max(due, self._last_due)
        return self._last_due

    def _shown(self, number: int) -> int:
        """Return which message's content goes out under this number."""
        if not self.settings.freeze:
            self._frozen = None
            return number
        if self._frozen is None:
            self._frozen = max(number - 1, 0)
        return self._frozen

    def _stamped(self, stamp: Stamp, dice: dict[str, float]) -> Stamp:
        if dice['stamp_zero'] < self.settings.stamp_zero:
            return 0
        jump = self.settings.stamp_jump if dice['jump'] < self.settings.jump else 0.0
        return stamp + round((self.settings.stamp_offset - jump) * SECOND_NS)

    def _damage(self, dice: dict[str, float]) -> Damage:
        for damage in (Damage.NAN, Damage.BLACK, Damage.BURST):
            if dice[damage.value] < getattr(self.settings, damage.value):
                return damage
        return Damage.NONE

    def _released(self, outcome: Outcome) -> tuple[Outcome, ...]:
        """Return the outcome, and behind it the message that was held back to follow it."""
        held, self._held = self._held, None
        if held is None:
            return (outcome,)
        return outcome, replace(held, due=self._in_order(outcome.due + _JUST_AFTER_NS))


Payload = typing.TypeVar('Payload')


class Channel(typing.Generic[Payload]):
    """A faulty line with the messages in it: `put` at one end, `take` what is due at the other.

    Parameters
    ----------
    settings : FaultSettings
    rng : numpy.random.Generator
    """

    def __init__(self, settings: FaultSettings, rng: np.random.Generator) -> None:
        self._injector = Injector(settings, rng)
        self._contents: dict[int, Payload] = {}
        self._count = 0
        self._line: list[tuple[Stamp, int, Outcome, Payload]] = []
        self._order = 0

    @property
    def next_due(self) -> Stamp | None:
        """Return when the next message comes out, ns; None for an empty line."""
        return self._line[0][0] if self._line else None

    def clear(self) -> None:
        """Forget what is in the line."""
        self._line.clear()

    def adopt(self, settings: FaultSettings) -> None:
        """Let other faults apply from the next message on."""
        self._injector.settings = settings

    def put(self, payload: Payload, stamp: Stamp, now: Stamp) -> None:
        """Send a message with this stamp at `now`, both ns."""
        self._contents[self._count] = payload
        self._count += 1
        for outcome in self._injector.take(stamp, now):
            self._order += 1
            heapq.heappush(self._line, (outcome.due, self._order, outcome,
                                        self._contents[outcome.number]))
        for number in [n for n in self._contents if n < self._injector.oldest_needed]:
            del self._contents[number]

    def take(self, now: Stamp) -> list[tuple[Outcome, Payload]]:
        """Return what has come out by `now`, ns, in order; the damage is still to be done."""
        out = []
        while self._line and self._line[0][0] <= now:
            _, _, outcome, payload = heapq.heappop(self._line)
            out.append((outcome, payload))
        return out


def damaged_image(image: Pixels, outcome: Outcome, settings: FaultSettings) -> Pixels:
    """Return the image (h, w[, 3]), uint8 or uint16, as the outcome leaves it."""
    if outcome.damage in (Damage.BLACK, Damage.NAN):
        return np.zeros_like(image)
    if outcome.damage is Damage.BURST:
        rng = np.random.default_rng(outcome.seed)
        full = np.iinfo(image.dtype).max
        noise = rng.standard_normal(image.shape, np.float32) * (settings.burst_noise * full / 255)
        noisy: Pixels = np.clip(image + noise, 0, full).astype(image.dtype)
        return noisy
    return image


def damaged_view(view: View, outcome: Outcome, settings: FaultSettings) -> View:
    """Return the view as the outcome leaves it, with the outcome's stamp."""
    if outcome.damage is Damage.BLACK:
        return View.empty(outcome.stamp, view.frame_id)
    points = np.array(view.points_xy)
    if outcome.damage is Damage.NAN:
        points[:] = np.nan
    elif outcome.damage is Damage.BURST:
        rng = np.random.default_rng(outcome.seed)
        points += rng.normal(0, settings.burst_spread, points.shape)
    return replace(view, stamp=outcome.stamp, points_xy=points)
