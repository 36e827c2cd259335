# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The controller's settings: names, defaults and ranges that others rely on."""

from __future__ import annotations

import pytest

from servo_nodes.control.settings import ControllerSettings, fixed_change
from servo_nodes.settings import definitions, mapping_from_settings, settings_from_mapping
from tests.control.views import settings

KNOWN = definitions(ControllerSettings)
DEFAULTS = mapping_from_settings(ControllerSettings())


def test_the_names_and_defaults_of_the_design_are_there():
    assert {'law.kind', 'law.interaction', 'law.gain', 'caps.linear', 'caps.angular',
            'watchdog.timeout', 'heartbeat.required', 'rate', 'output.frame',
            'output.from_camera'} <= set(KNOWN)
    assert DEFAULTS['caps.linear'] == 0.10 and DEFAULTS['watchdog.timeout'] == 0.12
    assert DEFAULTS['caps.hard_linear'] == 0.25
    assert DEFAULTS['caps.stop_deceleration'] == 1.0
    assert DEFAULTS['caps.stop_angular_deceleration'] == 5.0


def test_by_default_hold_and_ramp_fit_into_a_quarter_second_with_two_ticks_to_spare():
    ramp = max(DEFAULTS['caps.linear'] / DEFAULTS['caps.stop_deceleration'],
               DEFAULTS['caps.angular'] / DEFAULTS['caps.stop_angular_deceleration'])
    assert DEFAULTS['watchdog.timeout'] + ramp + 2 / DEFAULTS['rate'] <= 0.25


def test_every_setting_is_explained_and_every_number_is_bounded():
    for name, definition in KNOWN.items():
        if name.startswith('law.'):
            continue
        assert len(definition.help) > 20
        if definition.kind in (int, float):
            assert definition.low is not None and definition.high is not None


def test_no_number_switches_a_guard_off():
    for name in ('watchdog.timeout', 'watchdog.staleness', 'watchdog.travel', 'caps.linear',
                 'heartbeat.timeout', 'watchdog.stalled_window', 'watchdog.diverging_window'):
        assert KNOWN[name].low > 0
        for number in (0.0, -1.0, float('nan'), float('inf')):
            with pytest.raises(ValueError, match=name.rsplit('.', 1)[-1]):
                settings_from_mapping(ControllerSettings, {name: number})
    assert (KNOWN['watchdog.timeout'].low, KNOWN['watchdog.timeout'].high) == (0.05, 1.0)


@pytest.mark.parametrize(('values', 'words'), [
    ({'caps__linear': 0.26}, 'caps.linear: expected a finite number from 0.001 to 0.25'),
    ({'caps__linear': 0.2, 'caps__hard_linear': 0.15},
     'caps.linear: expected at most caps.hard_linear = 0.15, got 0.2'),
    ({'caps__angular': 1.2, 'caps__hard_angular': 1.0},
     'caps.angular: expected at most caps.hard_angular = 1, got 1.2'),
    ({'caps__hard_linear': 0.3}, 'caps.hard_linear: expected'),
    ({'caps__axes': (1, 1, 0.5, 1, 1, 1)}, 'caps.axes: expected zeros and at least one 1'),
    ({'caps__axes': (0,) * 6}, 'caps.axes: expected zeros and at least one 1'),
    ({'caps__axes': (1, 1, 1)}, 'caps.axes: expected 6'),
    ({'watchdog__crowd_slow': 0.8},
     'watchdog.crowd_slow: expected at most watchdog.crowd_hold = 0.7, got 0.8'),
    ({'watchdog__zero_stamp': 'ignore'}, 'watchdog.zero_stamp: expected one of receive, reject'),
    ({'watchdog__least_points': 3}, 'watchdog.least_points: expected a whole number'),
    ({'output__frame': 'tool0'}, 'output.frame: expected together with output.from_camera'),
    ({'output__from_camera': (0, 0, 0, 0, 0, 0, 1)},
     'output.frame: expected together with output.from_camera'),
    ({'output__frame': 'tool0', 'output__from_camera': (0,) * 7},
     'output.from_camera: quaternion: expected'),
    ({'output__frame': 'tool0', 'output__from_camera': (1, 2, 3)},
     'output.from_camera: expected 0 or 7 finite numbers, got 3 numbers'),
    ({'watchdog__timout': 0.1}, "did you mean 'watchdog.timeout'"),
])
def test_what_cannot_be_meant_is_refused_in_one_sentence(values, words):
    with pytest.raises(ValueError) as refusal:
        settings(**values)
    assert words in str(refusal.value) and '\n' not in str(refusal.value)


def test_a_change_of_what_is_fixed_is_told_by_name_and_any_other_change_is_not():
    plain = ControllerSettings()
    assert fixed_change(plain, settings(caps__linear=0.2, law__gain=3.0)) == ''
    assert fixed_change(plain, settings(rate=50.0)) == (
        'rate: expected 100.0 to stay while running, got 50.0; set it at the start')
    assert {name for name, definition in KNOWN.items() if definition.fixed} >= {
        'rate', 'caps.hard_linear', 'caps.hard_angular', 'output.frame', 'output.from_camera'}
