# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The colours of overlay, figures and page: one meaning each, told apart by colour-blind eyes too.

Colour never speaks alone: states carry a word and a shape, points a shape. A test simulates three
kinds of colour blindness and asks for a distance between all states.
"""

from __future__ import annotations

INK = '#14212b'
SOFT = '#5d6b76'
RULE = '#d9dfe4'
PAPER = '#ffffff'

NOW = '#ffb52b'
GOAL = '#39b6ff'

STATES = {
    'standby': '#b9c1c7',
    'servoing': '#1d5fb4',
    'holding': '#f5b81c',
    'settled': '#17a67f',
    'faulted': '#a3124f',
}

# Three axes, three hues, in figures: right, down, forward. Angular ones are the same, dashed.
AXES = ('#c2571a', '#3b7d23', '#2f4fa3')


def bgr(colour: str) -> tuple[int, int, int]:
    """Return `#rrggbb` as blue, green, red of 0..255."""
    red, green, blue = rgb(colour)
    return blue, green, red


def rgb(colour: str) -> tuple[int, int, int]:
    """Return `#rrggbb` as red, green, blue of 0..255."""
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)


def luminance(colour: str) -> float:
    """Return the relative luminance, 0..1 (WCAG 2.1, from memory)."""
    linear = [(part / 255 + 0.055) ** 2.4 / 1.055 ** 2.4 if part > 10 else part / 255 / 12.92
              for part in rgb(colour)]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def text_on(colour: str) -> str:
    """Return the text colour, ink or paper, that contrasts more with a ground."""
    ground = luminance(colour) + 0.05
    return INK if ground / (luminance(INK) + 0.05) > 1.05 / ground else PAPER
