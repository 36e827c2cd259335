# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The demo reaches nobody, comes home, takes its children with it, and refuses in one sentence."""

from __future__ import annotations

import contextlib
import json
import math
import os
import pathlib
import random
import signal
import socket
import subprocess
import sys
import time

import numpy as np
import pytest

from servo_nodes.report import record, stops
from servo_nodes.ros import demo, demo_processes
from servo_nodes.ros.demo_processes import Children, Trouble, free_domain, isolated

ROOT = pathlib.Path(__file__).resolve().parents[2]
DEMO = [sys.executable, '-c', 'from servo_nodes.ros.demo import main; main()']


def _environment():
    return {**os.environ, 'PYTHONPATH': os.pathsep.join(
        [str(ROOT), *filter(None, [os.environ.get('PYTHONPATH')])])}


def _alive(pid):
    """Return whether a process runs; a zombie does not."""
    with contextlib.suppress(OSError):
        return pathlib.Path(f'/proc/{pid}/stat').read_text().rsplit(')', 1)[1].split()[0] != 'Z'
    return False


def _gone(pids, seconds):
    """Return whether all processes have ended within some seconds."""
    until = time.monotonic() + seconds
    while any(map(_alive, pids)):
        if time.monotonic() > until:
            return False
        time.sleep(0.02)
    return True


def _children_of(pid):
    """Return the processes that a process started."""
    found = []
    for task in pathlib.Path(f'/proc/{pid}/task').iterdir():
        found += map(int, (task / 'children').read_text().split())
    return found


# -- isolation


def test_nodes_meet_only_on_this_machine_whatever_the_environment_says():
    wild = {'ROS_STATIC_PEERS': '10.0.0.7', 'ROS_DISCOVERY_SERVER': '10.0.0.7:11811',
            'ROS_LOCALHOST_ONLY': '0', 'ROS_AUTOMATIC_DISCOVERY_RANGE': 'SUBNET',
            'ROS_DOMAIN_ID': '0', 'CYCLONEDDS_URI': 'file:///robot.xml', 'HOME': '/home/a',
            'FASTDDS_DEFAULT_PROFILES_FILE': '/robot.xml', 'ROS_NAMESPACE': '/robot'}
    kept = isolated(wild, 55)
    assert kept['ROS_DOMAIN_ID'] == '55'
    assert kept['ROS_AUTOMATIC_DISCOVERY_RANGE'] == 'LOCALHOST'
    assert kept['HOME'] == '/home/a'
    assert '/robot' not in ' '.join(kept.values())
    assert '10.0.0.7' not in ' '.join(kept.values())


def _no_package(name):
    raise demo_processes.metadata.PackageNotFoundError(name)


@pytest.mark.parametrize(('distro', 'name'), [
    ('jazzy', 'FASTRTPS_DEFAULT_PROFILES_FILE'), ('lyrical', 'FASTDDS_DEFAULT_PROFILES_FILE'),
    (None, 'FASTDDS_DEFAULT_PROFILES_FILE')])
def test_the_shipped_profile_is_given_under_the_name_that_is_read(distro, name, monkeypatch):
    monkeypatch.setattr(demo_processes.metadata, 'version', _no_package)
    kept = isolated({} if distro is None else {'ROS_DISTRO': distro}, 55)
    assert kept[name] == str(ROOT / 'config' / 'dds_profile.xml')
    assert len([each for each in kept if each.endswith('_PROFILES_FILE')]) == 1


def test_the_older_wheels_read_the_older_name(monkeypatch):
    monkeypatch.setattr(demo_processes.metadata, 'version',
                        lambda name: '7.1' if name == 'ros-jazzy-rclpy' else _no_package(name))
    assert 'FASTRTPS_DEFAULT_PROFILES_FILE' in isolated({}, 55)


def test_a_domain_in_use_on_this_machine_is_not_taken(monkeypatch):
    monkeypatch.setattr(demo_processes, 'FIRST_DOMAIN', 93)
    monkeypatch.setattr(demo_processes, 'LAST_DOMAIN', 94)
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as other:
        other.bind(('127.0.0.1', 7410 + 250 * 93))
        assert {free_domain(random.Random(seed)) for seed in range(8)} == {94}


def test_no_free_domain_is_said_in_one_sentence(monkeypatch):
    monkeypatch.setattr(demo_processes, 'FIRST_DOMAIN', 93)
    monkeypatch.setattr(demo_processes, 'LAST_DOMAIN', 93)
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as other:
        other.bind(('127.0.0.1', 7410 + 250 * 93))
        with pytest.raises(Trouble, match='expected a ROS domain that is free on this machine'):
            free_domain(random.Random(1))


# -- children


@pytest.fixture
def children(tmp_path):
    with Children(namespace='n', environment=dict(os.environ), logs=tmp_path) as started:
        yield started


def _runs(monkeypatch, script):
    monkeypatch.setattr(demo_processes, 'executable',
                        lambda name: [sys.executable, '-c', script])


def test_a_child_that_ends_by_itself_is_told_with_its_code_and_last_lines(children, monkeypatch):
    _runs(monkeypatch, 'import sys; print("camera on fire"); sys.exit(3)')
    child = children.start('tracker', {})
    assert _gone([child.pid], 10)
    with pytest.raises(Trouble, match='tracker: expected the node to run, got its end with code 3'
                       ) as trouble:
        children.check()
    assert trouble.value.log == ('camera on fire',)


def test_parameters_and_namespace_reach_the_child_as_ros_arguments(children, monkeypatch):
    _runs(monkeypatch, 'import sys; print(" ".join(sys.argv[1:]))')
    child = children.start('simulator', {'seed': 3, 'rate': 2.0, 'on': True, 'at': (1.0, -2.0),
                                         'folder': "it's"})
    assert _gone([child.pid], 10)
    assert child.tail() == ["--ros-args -r __ns:=/n -p seed:=3 -p rate:=2.0 -p on:=true "
                            "-p at:=[1.0, -2.0] -p folder:='it''s'"]


def test_children_end_with_the_block_even_those_that_do_not_listen(tmp_path, monkeypatch):
    monkeypatch.setattr(demo_processes, 'PATIENCE_S', 0.3)
    _runs(monkeypatch, 'import signal, time; signal.signal(signal.SIGTERM, signal.SIG_IGN); '
          'print("deaf", flush=True); time.sleep(600)')
    with Children(namespace='n', environment=dict(os.environ), logs=tmp_path) as started:
        child = started.start('tracker', {})
        until = time.monotonic() + 10
        while child.tail() != ['deaf'] and time.monotonic() < until:
            time.sleep(0.02)
        assert child.tail() == ['deaf']
    assert not _alive(child.pid)


@pytest.mark.skipif(sys.platform != 'linux', reason='the kernel of Linux ends them')
def test_children_end_when_their_parent_is_killed_outright(tmp_path):
    script = f"""
import os, pathlib, sys, time
from servo_nodes.ros import demo_processes
demo_processes.executable = lambda name: [sys.executable, '-c', 'import time; time.sleep(600)']
children = demo_processes.Children(namespace='n', environment=dict(os.environ),
                                   logs=pathlib.Path({str(tmp_path)!r}))
print(children.start('tracker', {{}}).pid, flush=True)
time.sleep(600)
"""
    parent = subprocess.Popen([sys.executable, '-c', script], stdout=subprocess.PIPE, text=True,
                              env=_environment())
    try:
        pid = int(parent.stdout.readline())
        assert _alive(pid)
        parent.kill()
        assert _gone([pid], 5)
    finally:
        parent.kill()
        parent.wait()


# -- words


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
        env=_environment(), cwd=folder)
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
    silent = [stop for stop in found if stop.span.event.reason in (
        'features_silent', 'image_silent') and stop.span.seconds > 0.5]
    assert len(silent) >= 1
    assert silent[0].still is not None
    assert 'expected' in silent[0].span.event.text or 'allowed' in silent[0].span.event.text


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
                               stderr=subprocess.STDOUT, text=True, env=_environment(),
                               cwd=tmp_path)
    try:
        line = ''
        while 'Taught' not in line:
            line = running.stdout.readline()
            assert line, 'the demo ended before it taught anything'
        nodes = _children_of(running.pid)
        assert len(nodes) == 3
        running.send_signal(signal.SIGTERM)
        assert running.wait(15) == demo.STOPPED
        assert _gone(nodes, 1)
    finally:
        running.kill()
        running.wait()
