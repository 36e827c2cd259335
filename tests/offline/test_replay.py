# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The tool as a whole: one log through the bare cores and through `servo_replay`, and verdicts."""

from __future__ import annotations

import json
import subprocess
import sys
import xml.etree.ElementTree as ET

import numpy as np
import pytest

from servo_nodes import goal as goals
from servo_nodes.control.controller import Controller, ControllerSettings
from servo_nodes.offline.bags import Bag
from servo_nodes.offline.bags_topics import topics_of_parts
from servo_nodes.offline.loops import Decided, Loop
from servo_nodes.offline.replay import main
from servo_nodes.offline.replay_events import Script
from servo_nodes.offline.replay_goal import Request
from servo_nodes.offline.replay_run import replayed
from servo_nodes.offline.replay_settings import Choice
from servo_nodes.report import page
from servo_nodes.report import record as records
from servo_nodes.report.drawing import MissingExtra
from servo_nodes.tracking.options import TrackerSettings
from tests.offline import recordings
from tests.offline.recordings import START

BLIND = (1.5, 2.5)


@pytest.fixture(scope='module')
def plain():
    """Return a run in which nothing goes wrong."""
    return recordings.simulated(3.0)


@pytest.fixture(scope='module')
def occluded():
    """Return a run in which nothing is seen for a second."""
    return recordings.simulated(3.5, blind=BLIND)


@pytest.fixture(scope='module')
def seen():
    """Return a run with images, in which nothing is seen for 0.4 s."""
    return recordings.simulated(2.0, images='raw', blind=(1.2, 1.6))


@pytest.fixture(scope='module')
def goal_folder(tmp_path_factory):
    """Return the folder of the goal view."""
    folder = tmp_path_factory.mktemp('goal')
    goals.save(recordings.home_goal(), folder)
    return str(folder)


def replay(capsys, *arguments):
    """Return exit code and JSON of the tool."""
    code = main([*map(str, arguments), '--json'])
    return code, json.loads(capsys.readouterr().out)


def finding(result, name):
    """Return a finding by name."""
    return next(item for item in result['findings'] if item['name'] == name)


def limits(tmp_path, **values):
    """Return a file of thresholds."""
    path = tmp_path / 'thresholds.yaml'
    path.write_text('\n'.join(f'{name.replace("__", ".")}: {value}'
                              for name, value in values.items()))
    return path


def shadows(folder):
    """Return the decisions of the loop under test on a recording."""
    bag = Bag(folder)
    choice = Choice(TrackerSettings(), ControllerSettings())
    script = Script(bag, topics_of_parts(bag.kinds, bag.counts, {}), choice, images=False)
    return [item for item in Loop(Controller(choice.controller)).run(script.events(), bag.end)
            if isinstance(item, Decided)]


@pytest.mark.parametrize('which', ['plain', 'occluded'])
def test_one_log_through_bare_cores_and_through_the_replay_gives_the_same_commands(
        tmp_path, request, which):
    """Twists bit by bit, states, reasons, the stamps of the views and the times."""
    run = request.getfixturevalue(which)
    folder = recordings.written(tmp_path / 'run', run.messages, storage='mcap')
    ours = [item.command for item in shadows(folder) if item.given is not None]
    assert len(ours) == len(run.commands) > 200
    for mine, bare in zip(ours, run.commands, strict=True):
        assert (mine.decided, mine.state, mine.reason, mine.view_stamp) == (
            bare.decided, bare.state, bare.reason, bare.view_stamp)
        assert np.array_equal(mine.twist.vector, bare.twist.vector)


def test_without_the_state_topic_the_commands_alone_tell_when_the_loop_was_on(tmp_path):
    run = recordings.simulated(1.5, state=False)
    folder = recordings.written(tmp_path / 'run', run.messages)
    ours = [item.command for item in shadows(folder) if item.given is not None]
    assert all(np.array_equal(mine.twist.vector, bare.twist.vector)
               for mine, bare in zip(ours, run.commands, strict=True))


def test_a_run_without_faults_passes_and_claims_no_convergence(tmp_path, capsys, plain):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    code, result = replay(capsys, folder)
    assert (code, result['ok'], result['views_from']) == (0, True, 'features')
    assert finding(result, 'deviation.linear')['value'] == 0.0
    assert result['stops'] == [] and result['compared'] == len(plain.commands)
    assert 'cannot show that the loop converges' in result['caution']


@pytest.fixture(scope='module')
def judged(tmp_path_factory, occluded):
    """Return what the tool leaves of the occluded run: its folder, and the verdict in there."""
    folder = recordings.written(tmp_path_factory.mktemp('judged') / 'run', occluded.messages)
    out = folder.parent / 'out'
    assert main([str(folder), '--out', str(out)]) == 1
    return out, json.loads((out / 'verdict.json').read_text())


def test_an_occlusion_is_named_with_its_moment_and_the_time_to_stop(judged):
    out, result = judged
    stop = result['stops'][0]
    assert (stop['reason'], len(result['stops'])) == ('too_few_points', 1)
    assert abs(stop['at_s'] - BLIND[0]) < 0.1
    assert 0.0 < stop['reaction_s'] <= 0.25
    assert 0.9 < stop['lasted_s'] < 1.3
    assert finding(result, 'points.least')['ok'] is False
    assert finding(result, 'stop.missed')['ok'] and finding(result, 'stop.false')['ok']
    page = (out / 'page.html').read_text()
    assert 'too few points' in page and 'cannot show that the loop converges' in page


def test_a_silence_of_the_features_is_told_apart_from_points_not_seen(tmp_path, capsys):
    run = recordings.simulated(2.0, silent=(1.0, 1.4))
    folder = recordings.written(tmp_path / 'run', run.messages)
    _, result = replay(capsys, folder)
    assert [stop['reason'] for stop in result['stops']] == ['features_silent']


def test_images_are_tracked_anew_and_come_when_the_features_came(
        tmp_path, capsys, seen, goal_folder):
    """The tracker's points differ from the simulator's, so the twist does, by little."""
    folder = recordings.written(tmp_path / 'run', seen.messages, storage='mcap',
                                compression='storage')
    code, result = replay(capsys, folder, '--goal', goal_folder, '--out', tmp_path / 'out')
    assert result['views_from'] == 'images' and code in (0, 1)
    assert [stop['reason'] for stop in result['stops']] == ['too_few_points']
    assert finding(result, 'deviation.linear')['value'] < 0.02
    record = records.load(tmp_path / 'out' / 'record.json')
    names = {picture.name for picture in record.pictures}
    assert names == {'start', 'stop', 'end', 'goal'}
    assert record.image_size == (640, 480) and len(record.paths) > 20


def test_the_view_can_be_taught_from_the_recording_itself(tmp_path, capsys, seen):
    images = [item for item in seen.messages if item[1] in ('/servo/image', '/servo/camera_info')]
    folder = recordings.written(tmp_path / 'run', images)
    code, result = replay(capsys, folder, '--teach', 'last')
    assert result['views_from'] == 'images' and finding(result, 'engaged')['ok']
    assert any('taught from the recording' in note for note in result['notes'])
    assert any('engaged as soon as it could be' in note for note in result['notes'])


def test_compressed_images_will_do(tmp_path, capsys, goal_folder):
    run = recordings.simulated(0.8, images='compressed')
    folder = recordings.written(tmp_path / 'run', run.messages)
    _, result = replay(capsys, folder, '--goal', goal_folder)
    assert result['parts']['compressed'] == '/servo/image/compressed'
    assert finding(result, 'points.least')['value'] > 30


def test_the_recorded_camera_is_tracked_and_its_marker_board_taught(shared_data, capsys):
    folder = shared_data / 'bags' / 'marker_board_mcap'
    _, result = replay(capsys, folder, '--teach', 'first')
    assert (result['views'], result['messages'], result['damages']) == (1, 33, [])


@pytest.mark.parametrize('name', ['damaged_db3_truncated', 'damaged_db3_zero_length',
                                  'damaged_mcap_truncated', 'damaged_metadata_missing_file'])
def test_a_damaged_recording_ends_in_one_sentence_and_exit_code_two(shared_data, capsys, name):
    assert main([str(shared_data / 'bags' / name)]) == 2
    words = capsys.readouterr()
    lines = words.err.strip().splitlines()
    assert len(lines) == 1 and words.out == ''
    assert '.db3' in lines[0] or '.mcap' in lines[0]


@pytest.mark.parametrize('name', ['zstd_file', 'zstd_message'])
def test_a_recording_of_something_else_is_told_what_it_holds(shared_data, capsys, name):
    assert main([str(shared_data / 'bags' / name)]) == 2
    assert '/rosout (rcl_interfaces/msg/Log' in capsys.readouterr().err


def test_of_a_damaged_recording_the_readable_part_is_replayed(tmp_path, capsys, plain):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    file = folder / 'run.db3'
    file.write_bytes(file.read_bytes()[:-90_000])
    code, result = replay(capsys, folder, '--out', tmp_path / 'out')
    assert code == 2 and 'run.db3' in result['damages'][0]
    assert 50 < result['compared'] < len(plain.commands)
    suite = ET.parse(tmp_path / 'out' / 'junit.xml').getroot()[0]
    assert suite.get('errors') == '1'


def test_repeated_runs_leave_the_same_bytes(tmp_path, seen, goal_folder):
    """Two processes with different hash seeds."""
    folder = recordings.written(tmp_path / 'run', seen.messages)
    outs = [tmp_path / 'one', tmp_path / 'two']
    said = []
    for number, out in enumerate(outs):
        said.append(subprocess.run(
            [sys.executable, '-c', 'import sys; from servo_nodes.offline.replay import main; '
             'sys.exit(main())', str(folder), '--goal', goal_folder, '--out', str(out), '--json'],
            capture_output=True, text=True, timeout=120, check=False,
            env={'PYTHONHASHSEED': str(number), 'PYTHONPATH': ':'.join(sys.path)}).stdout)
    assert said[0] == said[1] and said[0]
    names = sorted(path.name for path in outs[0].iterdir())
    assert names == ['junit.xml', 'page.html', 'record.json', 'verdict.json']
    for name in names:
        assert (outs[0] / name).read_bytes() == (outs[1] / name).read_bytes(), name


def test_it_runs_where_no_ros_is_installed(tmp_path, plain):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    block = ('import sys\n'
             'class Without:\n'
             '    def find_spec(self, name, path=None, target=None):\n'
             '        if name.split(".")[0] in ("rclpy", "sensor_msgs", "std_msgs", '
             '"geometry_msgs", "rpyutils"):\n'
             '            raise ImportError(name)\n'
             'sys.meta_path.insert(0, Without())\n'
             'from servo_nodes.offline.replay import main\n'
             'sys.exit(main())\n')
    done = subprocess.run([sys.executable, '-c', block, str(folder)], capture_output=True,
                          text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize(('changed', 'name'), [
    ({'caps.linear': 0.02}, 'deviation.linear'), ({'caps.angular': 0.05}, 'deviation.angular')])
def test_other_settings_show_as_a_deviation(tmp_path, capsys, plain, changed, name):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    params = tmp_path / 'params.yaml'
    params.write_text(json.dumps({'controller': {'ros__parameters': changed}}))
    code, result = replay(capsys, folder, '--params', params)
    assert code == 1 and finding(result, name)['ok'] is False


def test_recorded_parameters_are_used(tmp_path, capsys):
    changed = {'law.gain': 0.4, 'caps.linear': 0.03}
    run = recordings.simulated(1.5, settings=changed)
    declared = (START, '/parameter_events', 'rcl_interfaces/msg/ParameterEvent',
                recordings.parameters_message('/servo/controller', changed, START))
    folder = recordings.written(tmp_path / 'with', [declared, *run.messages])
    assert finding(replay(capsys, folder)[1], 'deviation.linear')['value'] == 0.0
    folder = recordings.written(tmp_path / 'without', run.messages)
    assert finding(replay(capsys, folder)[1], 'deviation.linear')['value'] > 0.005


def test_a_parameter_changed_while_recording_is_followed(tmp_path, capsys, plain):
    """The shadow of a run without the change departs from it where the change comes."""
    change = (START + 1_000_000_000, '/parameter_events', 'rcl_interfaces/msg/ParameterEvent',
              recordings.parameters_message('/servo/controller', {'caps.linear': 0.01},
                                            START, changed=True))
    messages = sorted([*plain.messages, change], key=lambda item: item[0])
    folder = recordings.written(tmp_path / 'run', messages)
    assert finding(replay(capsys, folder)[1], 'deviation.linear')['value'] > 0.005


def test_a_stop_of_the_shadow_alone_is_a_false_one(tmp_path, capsys, plain):
    """A watchdog that wants more points than there are holds where the recording went on."""
    folder = recordings.written(tmp_path / 'run', plain.messages)
    halted = [(START + 1_500_000_000, '/servo/controller/halt', 'std_msgs/msg/Bool',
               recordings.kind('std_msgs/msg/Bool')(data=True))]
    messages = sorted([*plain.messages, *halted], key=lambda item: item[0])
    folder = recordings.written(tmp_path / 'halted', messages)
    code, result = replay(capsys, folder)
    assert code == 1 and finding(result, 'stop.false')['value'] == 1
    assert [stop['reason'] for stop in result['stops']] == ['halted']


def test_a_stop_of_the_recorded_controller_alone_is_a_missed_one(tmp_path, capsys, occluded):
    """The shadow is told of views where the recorded controller had none."""
    whole = recordings.simulated(3.5, state=False)
    views = [item for item in whole.messages if item[1] == '/servo/features']
    others = [item for item in occluded.messages if item[1] != '/servo/features']
    messages = sorted([*views, *others], key=lambda item: item[0])
    folder = recordings.written(tmp_path / 'run', messages)
    code, result = replay(capsys, folder)
    assert code == 1 and finding(result, 'stop.missed')['value'] == 1


@pytest.mark.parametrize(('values', 'name'), [
    ({'points__least': 10000}, 'points.least'), ({'latency__most': 0.001}, 'latency.most'),
    ({'stop__time': 0.01}, 'stop.time'), ({'stop__held': 0.01}, 'stop.held')])
def test_every_threshold_is_judged(tmp_path, capsys, occluded, values, name):
    folder = recordings.written(tmp_path / 'run', occluded.messages)
    lenient = {'points__share': 0.5, 'stop__held': 1.0}
    assert replay(capsys, folder, '--thresholds', limits(tmp_path, **lenient))[0] == 0
    strict = limits(tmp_path, **{**lenient, **values})
    code, result = replay(capsys, folder, '--thresholds', strict)
    failed = [item['name'] for item in result['findings'] if item['ok'] is False]
    assert (code, failed) == (1, [name])


def test_two_replays_are_compared(tmp_path, capsys, plain):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    record = tmp_path / 'other.json'
    records.save(replayed(Bag(folder), Request()).record, record)
    code, result = replay(capsys, folder, '--against', record)
    assert code == 0
    assert finding(result, 'against.linear')['value'] < 1e-8
    params = tmp_path / 'params.yaml'
    gain = 0.995 * ControllerSettings().law.gain
    params.write_text(f'controller: {{ros__parameters: {{law.gain: {gain}}}}}')
    code, result = replay(capsys, folder, '--against', record, '--params', params,
                          '--thresholds', limits(tmp_path, against__linear=0.0001))
    assert code == 1 and finding(result, 'against.linear')['ok'] is False
    assert finding(result, 'deviation.linear')['ok']


def test_a_replay_of_another_run_is_not_taken_for_the_same(tmp_path, capsys, plain, judged):
    folder = recordings.written(tmp_path / 'run', plain.messages)
    code, result = replay(capsys, folder, '--against', judged[0])
    assert code == 1 and finding(result, 'against.states')['ok'] is False


def test_junit_counts_what_failed_and_what_was_not_judged(judged):
    out, result = judged
    suite = ET.parse(out / 'junit.xml').getroot()[0]
    counts = [sum(item['ok'] is kind for item in result['findings']) for kind in (False, None)]
    assert [int(suite.get(name)) for name in ('failures', 'skipped')] == counts
    assert len(suite) == int(suite.get('tests')) == len(result['findings'])


@pytest.mark.parametrize(('arguments', 'words'), [
    (['--goal', 'nowhere'], 'expected images to track'), (['--teach', 'last'], 'expected images'),
    (['--topics', 'features=/servo/imag'], 'expected a topic of the recording'),
    (['--params', 'nowhere.yaml'], 'nowhere.yaml: expected a readable file'),
    (['--thresholds', 'nowhere.yaml'], 'nowhere.yaml: expected a readable file'),
    (['--against', 'nowhere'], 'nowhere')])
def test_unusable_input_ends_in_one_sentence(tmp_path, capsys, plain, arguments, words):
    folder = recordings.written(tmp_path / 'run', plain.messages[:40])
    assert main([str(folder), *arguments]) == 2
    lines = capsys.readouterr().err.strip().splitlines()
    assert len(lines) == 1 and words in lines[0]


def test_messages_that_are_none_are_counted_and_named(tmp_path, capsys, plain):
    spoiled = [(*item[:3], b'\0\1\2') if number % 9 == 0 and item[1] == '/servo/features' else item
               for number, item in enumerate(plain.messages)]
    folder = recordings.written(tmp_path / 'run', spoiled)
    _, result = replay(capsys, folder)
    note = next(note for note in result['notes'] if 'could not be read' in note)
    assert 'features' in note and result['views'] > 40


def test_stamps_of_another_clock_are_carried_over(tmp_path, capsys, plain):
    """The messages are recorded an hour after their stamps."""
    late = [(time + 3600 * 10**9, *rest) for time, *rest in plain.messages]
    folder = recordings.written(tmp_path / 'run', late)
    code, result = replay(capsys, folder)
    assert code == 0 and any('off the time of recording' in note for note in result['notes'])


def test_named_topics_are_used_whatever_the_others_are_called(tmp_path, capsys, plain):
    renamed = {'/servo/features': 'arm/points', '/servo/camera_twist': '/arm/go',
               '/servo/camera_info': 'arm/info', '/servo/controller/state': '/arm/how'}
    folder = recordings.written(tmp_path / 'run.bag', plain.messages, renamed=renamed)
    code, result = replay(capsys, folder, '--topics', 'features=/arm/points', 'command=arm/go')
    assert code == 0 and result['parts']['features'] == 'arm/points'
    assert finding(result, 'deviation.linear')['value'] == 0.0


def test_a_recorder_that_was_late_is_found_out_by_the_stamps_of_the_commands(
        tmp_path, capsys, plain):
    """Everything is recorded 0.6 s late, and the stamps tell."""
    late = [(time + 600_000_000, *rest) for time, *rest in plain.messages]
    folder = recordings.written(tmp_path / 'run', late)
    code, result = replay(capsys, folder)
    assert code == 0 and finding(result, 'deviation.linear')['value'] == 0.0
    assert any('up to 0.60 s late' in note for note in result['notes'])


def test_a_recording_that_lost_commands_says_so(tmp_path, capsys, plain):
    kept = [item for number, item in enumerate(plain.messages)
            if item[1] != '/servo/camera_twist' or number % 4 == 0]
    folder = recordings.written(tmp_path / 'run', kept)
    _, result = replay(capsys, folder)
    assert any('were not recorded' in note for note in result['notes'])


def test_without_matplotlib_everything_but_the_page_is_left(tmp_path, capsys, plain, monkeypatch):
    def missing(record, path):
        raise MissingExtra('expected matplotlib, got none')
    monkeypatch.setattr(page, 'write', missing)
    folder = recordings.written(tmp_path / 'run', plain.messages)
    assert main([str(folder), '--out', str(tmp_path / 'out')]) == 0
    assert 'no page: expected matplotlib' in capsys.readouterr().err
    assert sorted(path.name for path in (tmp_path / 'out').iterdir()) == [
        'junit.xml', 'record.json', 'verdict.json']
