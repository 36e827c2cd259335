# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The demo comes home, tells how, takes its children with it, and refuses in one sentence."""

from __future__ import annotations

import json
import math
import signal
import subprocess
import sys

import numpy as np
import pytest

from servo_nodes.report import record, stops
from servo_nodes.ros import demo
from servo_nodes.ros.demo_processes import Trouble
from tests.ros.demo_shared import children_of, environment, gone

DEMO = [sys.executable, '-c', 'from servo_nodes.ros.demo import main; main()']


@pytest.mark.parametrize(('arguments', 'words'), [
    (['--seed', '-1'], 'expected 0 to 2147483647, got -1'),
    (['--timeout', 'nan'], 'expected 1 to 3600 s, got nan'),
    (['--start', '0', '0', '0', '0', '0', 'inf'], 'expected six finite numbers'),
    (['--domain', '300'], 'invalid choice: 300')])
def test_options_that_cannot_be_are_refused_with_code_2(arguments, words, capsys):
    with pytest.raises(SystemExit) as ended:
        demo.run(arguments)
    assert ended.value.code == demo.UNUSABLE
    assert words in capsys.readouterr().err


@pytest.mark.parametrize('package', ['matplotlib', 'rclpy', 'rosbags'])
def test_a_missing_extra_is_one_sentence_and_code_2(package, monkeypatch, capsys, tmp_path):
    find = demo.importlib.util.find_spec
    monkeypatch.setattr(demo.importlib.util, 'find_spec',
                        lambda name: None if name == package else find(name))
    assert demo.run(['--out', str(tmp_path), '--bag', str(tmp_path / 'bag')]) == demo.UNUSABLE
    words = capsys.readouterr()
    assert words.out == ''
    assert words.err.count('\n') == 1
    assert f'expected the package {package}, got none; ' in words.err


def test_a_place_that_cannot_be_written_is_one_sentence_and_code_2(tmp_path, capsys):
    (tmp_path / 'file').write_text('')
    assert demo.run(['--out', str(tmp_path / 'file')]) == demo.UNUSABLE
    assert 'expected a place to write, got' in capsys.readouterr().err


class _Terminal:
    def __init__(self, live):
        self.text, self._live = '', live

    def isatty(self):
        return self._live

    def write(self, text):
        self.text += text

    def flush(self):
        pass


def test_progress_rewrites_one_line_on_a_terminal_and_is_sparse_elsewhere(monkeypatch):
    now = [0.0]
    monkeypatch.setattr(demo.time, 'monotonic', lambda: now[0])
    terminal, file = _Terminal(True), _Terminal(False)
    words = demo.Words(terminal), demo.Words(file)
    for tick in range(40):
        now[0] = tick * 0.05
        for each in words:
            each.show(f'error {40 - tick} px')
    for each in words:
        each.say('settled')
    assert '\n' not in terminal.text.removesuffix('settled\n')
    assert terminal.text.count('\r') >= 18
    assert terminal.text.endswith('\rsettled\n')
    assert '\r' not in file.text
    assert file.text.count('error') == 2


# -- the whole of it


@pytest.fixture(scope='module')
def finished(tmp_path_factory):
    """Return the folder and the result of one demo in which the camera falls silent for 1 s."""
    pytest.importorskip('rosbags', reason='--bag needs the extra bags')
    folder = tmp_path_factory.mktemp('demo')
    done = subprocess.run(
        [*DEMO, '--out', str(folder), '--seed', '4', '--json', '--timeout', '60', '--fault',
         'stall', '--bag', str(folder / 'bag')], capture_output=True, text=True, timeout=150,
        env=environment(), cwd=folder)
    assert done.returncode == demo.GOOD, done.stderr
    assert 'not a safety-rated function' in done.stderr
    return folder, json.loads(done.stdout)


@pytest.mark.processes
def test_the_demo_comes_home_over_real_processes(finished):
    """0.4 mm and 0.06 deg are what we promise; the time allows for a busy machine."""
    _, result = finished
    assert result['settled'] and result['good']
    assert 0 < result['settle_s'] < 60
    assert result['position_error_mm'] < 0.4
    assert result['angle_error_deg'] < 0.06
    assert result['error_px'] < 1
    assert result['seed'] == 4
    assert result['start'] == [0.05, -0.04, -0.1, 6, -5, 20]
    assert result['stops'] >= 1


@pytest.mark.processes
def test_the_demo_leaves_a_page_and_a_record_of_its_way_home(finished):
    folder, _ = finished
    page = (folder / 'report.html').read_text()
    assert 'The camera came back to the view it was taught.' in page
    assert len(page) < 2_500_000
    run = record.load(folder / 'record.json')
    away = [1000 * math.hypot(*row[:3]) for row in run.series['offset'].values]
    assert away[0] == pytest.approx(118.7, abs=1)
    assert away[-1] < 0.4
    caps = run.series['caps'].values[0]
    twists = run.series['twist'].values
    assert (np.linalg.norm(twists[:, :3], axis=1) <= caps[0] * (1 + 1e-9)).all()
    assert (np.linalg.norm(twists[:, 3:], axis=1) <= caps[1] * (1 + 1e-9)).all()
    assert len(run.paths) > 40


@pytest.mark.processes
def test_the_record_tells_why_and_how_fast_it_stopped_when_the_camera_fell_silent(finished):
    folder, _ = finished
    found = stops.stops(record.load(folder / 'record.json'))
    # On a busy machine another reason may come a moment before the silence.
    silent = [stop for stop in found if stop.span.seconds > 0.5 and
              {stop.span.event.reason, *stop.then} & {'features_silent', 'image_silent'}]
    assert len(silent) >= 1
    assert silent[0].still is not None
    assert silent[0].span.event.text


@pytest.mark.processes
def test_the_recording_holds_topics_and_parameters_and_others_can_read_it(finished):
    """Read back by rosbags, which is none of ours."""
    from rosbags.highlevel import AnyReader
    folder, _ = finished
    nodes, topics, error = {}, {}, None
    with AnyReader([folder / 'bag']) as reader:
        for connection, _, data in reader.messages():
            topics[connection.topic] = topics.get(connection.topic, 0) + 1
            if connection.topic == '/parameter_events':
                event = reader.deserialize(data, connection.msgtype)
                nodes[event.node] = {each.name: each.value for each in event.new_parameters}
            elif connection.topic == '/servo/camera_twist':
                error = reader.deserialize(data, connection.msgtype).twist.linear.x
    assert set(nodes) == {'/servo/tracker', '/servo/controller', '/servo/simulator'}
    assert nodes['/servo/tracker']['teach.distance'].double_value == 0.42
    assert nodes['/servo/controller']['caps.linear'].double_value > 0
    assert topics['/servo/image'] > 5
    assert topics['/servo/camera_twist'] > 50
    assert error is not None
    assert {'/servo/features', '/servo/camera_info', '/servo/true_pose',
            '/servo/controller/state'} <= set(topics)


def test_a_recording_is_never_written_over_another_one(tmp_path):
    pytest.importorskip('rosbags', reason='--bag needs the extra bags')
    from servo_nodes.ros.demo_bag import Bag
    with pytest.raises(Trouble, match='--bag .*: expected a folder that is not there yet, got'):
        Bag(tmp_path)


@pytest.mark.processes
def test_the_demo_takes_its_children_with_it_when_it_is_asked_to_end(tmp_path):
    running = subprocess.Popen([*DEMO, '--out', str(tmp_path)], stdout=subprocess.PIPE,
                               stderr=subprocess.STDOUT, text=True, env=environment(),
                               cwd=tmp_path)
    try:
        line = ''
        while 'Taught' not in line:
            line = running.stdout.readline()
            assert line, 'the demo ended before it taught anything'
        nodes = children_of(running.pid)
        assert len(nodes) == 3
        running.send_signal(signal.SIGTERM)
        assert running.wait(15) == demo.STOPPED
        assert gone(nodes, 1)
    finally:
        running.kill()
        running.wait()
