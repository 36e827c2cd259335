# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Where the settings of a replay come from."""

from __future__ import annotations

import pytest

from servo_nodes.control.settings import ControllerSettings
from servo_nodes.offline.replay_settings import SHELLS, Names, chosen, names_from_event
from servo_nodes.ros import options
from servo_nodes.settings import definitions
from servo_nodes.tracking.options import TrackerSettings
from tests.offline import recordings


def file(tmp_path, text, name='params.yaml'):
    """Write a parameter file."""
    path = tmp_path / name
    path.write_text(text)
    return path


def test_without_anything_the_defaults_are_taken():
    choice = chosen(Names(), [], [])
    assert (choice.controller, choice.tracker) == (ControllerSettings(), TrackerSettings())


def test_a_file_gives_each_node_its_own_and_a_wildcard_what_it_knows(tmp_path):
    path = file(tmp_path, '/**:\n  ros__parameters:\n    law: {gain: 2}\n    seed: 4\n'
                '/servo/tracker:\n  ros__parameters: {teach.distance: 0.7}\n'
                '/servo/other:\n  ros__parameters: {anything: 1}\n')
    choice = chosen(Names(), [path], [])
    assert choice.controller.law.gain == 2.0
    assert choice.tracker.teach.distance == 0.7


def test_later_files_win_over_earlier_ones_and_all_over_the_recording(tmp_path):
    recorded = Names()
    recorded.of['controller'] = {'law.gain': 0.3, 'caps.linear': 0.05, 'use_sim_time': False}
    paths = [file(tmp_path, f'controller: {{ros__parameters: {{law.gain: {gain}}}}}', str(gain))
             for gain in (0.4, 0.5)]
    choice = chosen(recorded, paths, [])
    assert (choice.controller.law.gain, choice.controller.caps.linear) == (0.5, 0.05)


@pytest.mark.parametrize(('text', 'words'), [
    ('controller: {ros__parameters: {law.gian: 1.0}}', "law.gian: .*did you mean 'law.gain'"),
    ('controller: {ros__parameters: {law.gain: -1.0}}', 'gain: expected'),
    ('controller: {law.gain: 1.0}', 'expected ros__parameters'), ('- a', 'names and values'),
    ('a: [', 'expected YAML'), ('!!python/object/apply:os.system [ls]', 'expected YAML')])
def test_a_wrong_file_is_refused_with_its_name(tmp_path, text, words):
    with pytest.raises(ValueError, match=f'params.yaml: .*{words}'):
        chosen(Names(), [file(tmp_path, text)], [])


def test_a_file_that_is_not_there_is_named(tmp_path):
    with pytest.raises(ValueError, match='nowhere.yaml: expected a readable file'):
        chosen(Names(), [tmp_path / 'nowhere.yaml'], [])


def test_recorded_parameters_of_another_version_leave_a_note():
    recorded = Names()
    recorded.of['controller'] = {'law.gain': 1e9, 'law.unheard_of': 1}
    notes = []
    assert chosen(recorded, [], notes).controller == ControllerSettings()
    assert 'the recorded parameters are not used: law.gain' in notes[0]


def test_parameter_events_are_read_by_the_last_word_of_the_node():
    names = Names()
    declared = {'law.gain': 0.5, 'law.kind': 'points', 'heartbeat.required': True}
    for node in ('/servo/controller', '/servo/camera'):
        names_from_event(recordings.parameters_message(node, declared, 0), names, changed=False)
    assert names.of['controller'] == declared
    assert chosen(names, [], []).controller.heartbeat.required


def test_what_only_the_nodes_know_is_allowed_in_a_file():
    """The list agrees with the settings that the nodes declare beside those of their cores."""
    shells = {name for cls in (options.ShellSettings, options.TrackerNodeSettings,
                               options.ControllerNodeSettings, options.SimulatorNodeSettings)
              for name in definitions(cls)}
    assert shells <= set(SHELLS)
