# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The nodes of the demo reach nobody, and cannot outlive it."""

from __future__ import annotations

import os
import random
import socket
import subprocess
import sys
import time

import pytest

from servo_nodes.ros import demo_processes
from servo_nodes.ros.demo_processes import Children, Trouble, free_domain, isolated
from tests.ros.demo_shared import ROOT, alive, environment, gone

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
    assert gone([child.pid], 10)
    with pytest.raises(Trouble, match='tracker: expected the node to run, got its end with code 3'
                       ) as trouble:
        children.check()
    assert trouble.value.log == ('camera on fire',)


def test_parameters_and_namespace_reach_the_child_as_ros_arguments(children, monkeypatch):
    _runs(monkeypatch, 'import sys; print(" ".join(sys.argv[1:]))')
    child = children.start('simulator', {'seed': 3, 'rate': 2.0, 'on': True, 'at': (1.0, -2.0),
                                         'folder': "it's"})
    assert gone([child.pid], 10)
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
    assert not alive(child.pid)


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
                              env=environment())
    try:
        pid = int(parent.stdout.readline())
        assert alive(pid)
        parent.kill()
        assert gone([pid], 5)
    finally:
        parent.kill()
        parent.wait()
