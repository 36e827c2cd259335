# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Colours are told apart by colour-blind eyes, and words on them can be read."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from servo_nodes.report import palette
from servo_nodes.values import State

# Machado, Oliveira & Fernandes 2009, doi 10.1109/TVCG.2009.113, severity 1.0 (from memory).
SIGHTS = {
    'all cones': np.eye(3),
    'protanopia': np.array([[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
                            [-0.003882, -0.048116, 1.051998]]),
    'deuteranopia': np.array([[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
                              [-0.011820, 0.042940, 0.968881]]),
    'tritanopia': np.array([[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602],
                            [0.004733, 0.691367, 0.303900]])}


def _seen(colour, sight):
    colour = np.array(palette.rgb(colour)) / 255
    linear = np.where(colour <= 0.04045, colour / 12.92, ((colour + 0.055) / 1.055) ** 2.4)
    linear = np.clip(SIGHTS[sight] @ linear, 0, 1)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)


def _distance(first, second, sight):
    color = pytest.importorskip('skimage.color', reason='scikit-image measures the distance')
    labs = [color.rgb2lab(_seen(one, sight).reshape(1, 1, 3)) for one in (first, second)]
    return float(color.deltaE_ciede2000(*labs).item())


@pytest.mark.parametrize('sight', SIGHTS)
def test_states_are_told_apart_by_their_colour(sight):
    """scikit-image's CIEDE2000; a distance of 10 is plain at a glance (common practice)."""
    for first, second in itertools.combinations(palette.STATES.values(), 2):
        assert _distance(first, second, sight) > 15


@pytest.mark.parametrize('sight', SIGHTS)
def test_points_and_goals_and_the_axes_are_told_apart_by_their_colour(sight):
    assert _distance(palette.NOW, palette.GOAL, sight) > 25
    assert _distance(palette.GOAL, palette.STATES['holding'], sight) > 25


def test_every_state_of_the_controller_has_a_colour():
    assert set(palette.STATES) == {state.value for state in State}


@pytest.mark.parametrize('colour', [*palette.STATES.values(), palette.INK, palette.PAPER])
def test_words_on_a_colour_can_be_read(colour):
    """WCAG 2.1 asks a contrast of 4.5 of text, 3 of large text and shapes (from memory)."""
    light, dark = sorted((palette.luminance(colour), palette.luminance(palette.text_on(colour))),
                         reverse=True)
    assert (light + 0.05) / (dark + 0.05) >= 4.5


def test_luminance_is_that_of_the_standard():
    """Black 0, white 1, pure green 0.7152: the coefficients of ITU-R BT.709."""
    assert palette.luminance('#000000') == 0
    assert palette.luminance('#ffffff') == pytest.approx(1)
    assert palette.luminance('#00ff00') == pytest.approx(0.7152)


def test_the_order_of_the_channels_is_what_the_name_says():
    assert palette.rgb('#010203') == (1, 2, 3)
    assert palette.bgr('#010203') == (3, 2, 1)
