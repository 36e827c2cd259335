# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""A sheet to draw on in metres: fills with soft edges, worn paint, noise that looks like metal."""

from __future__ import annotations

import copy
import math
import typing
from collections.abc import Sequence

import cv2
import numpy as np
import numpy.typing as npt

from servo_nodes.simulation.texture import Pixels
from servo_nodes.values import Floats

Colour = tuple[float, float, float]
Field: typing.TypeAlias = npt.NDArray[np.float32]

_SHIFT = 5


class Canvas:
    """A BGR picture, uint8, with its origin in the middle; x right, y down, m.

    Parameters
    ----------
    wide, high : float, m
    resolution : float, m per pixel
    rng : numpy.random.Generator
    """

    def __init__(self, wide: float, high: float, resolution: float,
                 rng: np.random.Generator) -> None:
        self.rng = rng
        self.resolution = resolution
        # Even sizes, so that a smaller sheet in the middle of a larger one lies on its pixels.
        self.size = (2 * round(wide / resolution / 2), 2 * round(high / resolution / 2))
        self.pixels: Pixels = np.zeros((self.size[1], self.size[0], 3), np.uint8)
        self.wear = self.clouds(0.06)

    def refined(self) -> Canvas:
        """Return this sheet with pixels half as large."""
        finer = copy.copy(self)
        finer.resolution = self.resolution / 2
        finer.size = (2 * self.size[0], 2 * self.size[1])
        finer.pixels = cv2.resize(self.pixels, finer.size, interpolation=cv2.INTER_CUBIC)
        return finer

    def middle(self, wide: float, high: float) -> Canvas:
        """Return a smaller sheet that draws into the middle of this one."""
        part = Canvas(wide, high, self.resolution, self.rng)
        left, top = np.subtract(self.size, part.size) // 2
        part.pixels = self.pixels[top:top + part.size[1], left:left + part.size[0]]
        return part

    def cover(self, material: Field, tint: npt.NDArray[np.float32]) -> None:
        """Paint the whole sheet: brightness (h, w) times tint (h or 1, w or 1, 3)."""
        self.pixels[:] = np.clip(material[..., None] * tint, 0, 255)

    def fill(self, outlines: Sequence[npt.ArrayLike], colour: Colour, *, opacity: float = 1.0,
             soft: float = 0.0, worn: float = 0.0) -> None:
        """Fill outlines, each (N, 2), m, by the even-odd rule.

        `soft`, m, blurs the edge; `worn` is the share of the paint that is gone, in patches.
        """
        placed = self._mask(outlines, soft)
        if placed is None:
            return
        (rows, columns), mask = placed
        alpha = mask.astype(np.float32) * (opacity / 255)
        if worn > 0:
            alpha *= _ramp(self.wear[rows, columns], worn - 0.04, worn + 0.04)
        self._blend((rows, columns), np.array(colour, np.float32), alpha)

    def shade(self, outlines: Sequence[npt.ArrayLike], factor: float, *,
              soft: float = 0.0) -> None:
        """Multiply the brightness inside outlines by `factor`; soft edges as in `fill`."""
        placed = self._mask(outlines, soft)
        if placed is None:
            return
        (rows, columns), mask = placed
        part = self.pixels[rows, columns]
        change = 1 + mask.astype(np.float32)[..., None] * ((factor - 1) / 255)
        self.pixels[rows, columns] = np.clip(part * change, 0, 255).astype(np.uint8)

    def lay(self, outlines: Sequence[npt.ArrayLike], material: Field, tint: Colour, *,
            soft: float = 0.0) -> None:
        """Fill outlines with a material: its brightness (h, w) of the whole sheet times a tint."""
        placed = self._mask(outlines, soft)
        if placed is None:
            return
        where, mask = placed
        self._blend(where, material[where][..., None] * np.array(tint, np.float32),
                    mask.astype(np.float32) / np.float32(255))

    def stain(self, amount: Field, colour: Colour) -> None:
        """Blend a colour over the whole sheet by `amount` (h, w), 0..1."""
        whole = (slice(0, self.size[1]), slice(0, self.size[0]))
        self._blend(whole, np.array(colour, np.float32), amount)

    def write(self, text: str, at: tuple[float, float], wide: float, colour: Colour) -> None:
        """Write small print `wide`, m, long; `at` is its lower left corner."""
        font, place = cv2.FONT_HERSHEY_DUPLEX, self._place(np.array([at]))[0]
        scale = wide / self.resolution / cv2.getTextSize(text, font, 1.0, 2)[0][0]
        x, y = np.round(place).astype(int).tolist()
        # OpenCV writes on arrays of its own only, not on a window of a larger one.
        sheet = np.ascontiguousarray(self.pixels)
        cv2.putText(sheet, text, (x, y), font, scale, colour, max(1, round(2 * scale)),
                    cv2.LINE_AA)
        self.pixels[:] = sheet

    def inside(self, outlines: Sequence[npt.ArrayLike], soft: float = 0.0) -> Field:
        """Return (h, w), 0..1: how much of each pixel the outlines cover."""
        whole = np.zeros(self.pixels.shape[:2], np.float32)
        placed = self._mask(outlines, soft)
        if placed is not None:
            whole[placed[0]] = placed[1].astype(np.float32) / 255
        return whole

    def clouds(self, coarsest: float) -> Field:
        """Return fractal noise (h, w), spread over 0..1, with lumps of at most `coarsest`, m."""
        octaves = max(1, math.floor(math.log2(coarsest / self.resolution)))
        total = np.zeros((1, 1), np.float32)
        for octave in range(octaves, 0, -1):
            shape = tuple(math.ceil(side / 2 ** octave) + 2 for side in self.size)
            total = typing.cast(Field, cv2.resize(total, shape, interpolation=cv2.INTER_LINEAR))
            total += self.rng.standard_normal(total.shape, np.float32) * 0.62 ** -octave
        total = typing.cast(Field, cv2.resize(total, self.size, interpolation=cv2.INTER_CUBIC))
        # The logistic function makes Gaussian values nearly even.
        total = (total - total.mean()) * np.float32(-1.702 / total.std())
        return typing.cast(Field, 1 / (1 + cv2.exp(total)))

    def brushed(self, length: float) -> Field:
        """Return the grain (h, w), about 0 +- 1, of metal that was brushed from left to right."""
        long, fine = length / self.resolution, max(1.0, 0.0005 / self.resolution)
        return self._lattice(fine, long) + 0.6 * self._lattice(3 * fine, 2.5 * long)

    def _lattice(self, down: float, across: float) -> Field:
        shape = (math.ceil(self.size[1] / down) + 1, math.ceil(self.size[0] / across) + 1)
        small = self.rng.standard_normal(shape, np.float32)
        return typing.cast(Field, cv2.resize(small, self.size, interpolation=cv2.INTER_CUBIC))

    def _place(self, points: npt.ArrayLike) -> Floats:
        middle = np.subtract(self.size, 1) / 2
        return typing.cast(Floats, np.asarray(points, np.float64) / self.resolution + middle)

    def _mask(self, outlines: Sequence[npt.ArrayLike],
              soft: float) -> tuple[tuple[slice, slice], Pixels] | None:
        """Return the box the outlines need and how much of each pixel they cover, 0..255."""
        placed = [self._place(outline) for outline in outlines]
        sigma = soft / self.resolution
        margin = 2 + math.ceil(3 * sigma)
        every = np.concatenate(placed)
        low = np.maximum(np.floor(every.min(0)).astype(int) - margin, 0)
        high = np.minimum(np.ceil(every.max(0)).astype(int) + margin + 1, self.size)
        if (high <= low).any():
            return None
        mask = np.zeros((high[1] - low[1], high[0] - low[0]), np.uint8)
        cv2.fillPoly(mask, [np.round((p - low) * 2 ** _SHIFT).astype(np.int32) for p in placed],
                     [255], cv2.LINE_AA, _SHIFT)
        mask = _softened(mask, sigma)
        return (slice(low[1], high[1]), slice(low[0], high[0])), mask

    def _blend(self, where: tuple[slice, slice], colour: npt.NDArray[np.float32],
               alpha: Field) -> None:
        part = self.pixels[where].astype(np.float32)
        part += (colour - part) * alpha[..., None]
        self.pixels[where] = np.clip(part + 0.5, 0, 255).astype(np.uint8)


def box(x0: float, y0: float, x1: float, y1: float, radius: float = 0.0) -> Floats:
    """Return the outline of a rectangle with rounded corners."""
    if radius <= 0:
        return np.array([(x0, y0), (x1, y0), (x1, y1), (x0, y1)])
    corner = np.linspace(0, np.pi / 2, 12)
    centres = ((x1 - radius, y1 - radius), (x0 + radius, y1 - radius),
               (x0 + radius, y0 + radius), (x1 - radius, y0 + radius))
    return np.concatenate([
        np.stack([cx + radius * np.cos(corner + quarter * np.pi / 2),
                  cy + radius * np.sin(corner + quarter * np.pi / 2)], axis=-1)
        for quarter, (cx, cy) in enumerate(centres)])


def disc(x: float, y: float, radius: float, corners: int = 72, turn: float = 0.0) -> Floats:
    """Return the outline of a circle, or of a regular polygon with few corners."""
    angle = np.arange(corners) * (2 * np.pi / corners) + turn
    return np.stack([x + radius * np.cos(angle), y + radius * np.sin(angle)], axis=-1)


def stroke(path: npt.ArrayLike, width: float, *, tapered: bool = False) -> Floats:
    """Return the outline of a line of that width along a path (N, 2), with flat ends."""
    path = np.asarray(path, dtype=np.float64)
    along = np.gradient(path, axis=0)
    along /= np.maximum(np.linalg.norm(along, axis=1, keepdims=True), 1e-12)
    side = np.stack([-along[:, 1], along[:, 0]], axis=-1) * (width / 2)
    if tapered:
        side *= np.sin(np.linspace(0.05, np.pi - 0.05, len(path)))[:, None]
    return np.concatenate([path + side, (path - side)[::-1]])


def blot(rng: np.random.Generator, x: float, y: float, radius: float, corners: int = 11) -> Floats:
    """Return a ragged outline, as paint chips off."""
    angle = np.sort(rng.uniform(0, 2 * np.pi, corners))
    reach = radius * rng.uniform(0.45, 1.0, corners)
    flat, turn = rng.uniform(0.5, 1.0), rng.uniform(0, np.pi)
    points = np.stack([reach * np.cos(angle), flat * reach * np.sin(angle)], axis=-1)
    cosine, sine = math.cos(turn), math.sin(turn)
    outline: Floats = points @ np.array([[cosine, sine], [-sine, cosine]]) + (x, y)
    return outline


def _ramp(field: Field, low: float, high: float) -> Field:
    ramp: Field = np.clip((field - np.float32(low)) / np.float32(high - low), 0, 1)
    return ramp


def _softened(mask: Pixels, sigma: float) -> Pixels:
    if sigma < 0.3:
        return mask
    if sigma < 6:
        return typing.cast(Pixels, cv2.GaussianBlur(mask, (0, 0), sigma))
    size = (mask.shape[1], mask.shape[0])
    small = cv2.resize(mask, (size[0] // 4 + 1, size[1] // 4 + 1), interpolation=cv2.INTER_AREA)
    soft = cv2.GaussianBlur(small, (0, 0), sigma / 4)
    return typing.cast(Pixels, cv2.resize(soft, size, interpolation=cv2.INTER_LINEAR))
