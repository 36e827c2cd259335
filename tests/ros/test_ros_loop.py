# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The whole loop: three processes, taught, sent away, engaged, home again, stopped."""

from __future__ import annotations

import math
import signal
import time

import pytest
from geometry_msgs.msg import PoseStamped
from rclpy.qos import qos_profile_sensor_data
from sensor_msgs.msg import Image, PointCloud2
from std_msgs.msg import Bool
from std_srvs.srv import Trigger

from servo_nodes import wire
from servo_nodes.ros.trial import AWAY, HOME_DISTANCE, Trial

pytestmark = pytest.mark.processes
HARD_LINEAR, HARD_ANGULAR = 0.25, 1.5


@pytest.fixture(scope='module')
def trial(module_rig):
    """Return a running, taught loop."""
    made = Trial(module_rig)
    made.teach()
    return made


@pytest.fixture
def last(trial):
    """Return a function that gives the last message of a topic, waiting for one."""
    doors = []

    def get(kind, name, timeout=5.0):
        got = []
        doors.append(trial.rig.node.create_subscription(kind, name, got.append,
                                                        qos_profile_sensor_data))
        trial.rig.until(lambda: got, timeout, what=f'a message on {name}')
        return got[-1]
    yield get
    for door in doors:
        trial.rig.node.destroy_subscription(door)


def checked(commands):
    """Assert what must hold for every command ever sent."""
    assert commands
    for command in commands:
        assert all(math.isfinite(value) for value in command.vector)
        assert math.hypot(*command.vector[:3]) <= 0.10 + 1e-9
        assert math.hypot(*command.vector[3:]) <= 0.5 + 1e-9
    stamps = [command.stamp for command in commands]
    assert all(later > earlier for earlier, later in zip(stamps, stamps[1:], strict=False))


def test_the_loop_brings_the_camera_home(trial, last):
    """It settles where the view was taught, by the simulator's truth."""
    trial.go()
    trial.rig.until(lambda: trial.observer.state == 'settled', 90.0, what='state settled')
    pose = last(PoseStamped, 'true_pose').pose
    at = pose.position
    # Home is straight in front of the plate; 1 mm at 0.42 m is about 1.4 px of the 600 px lens.
    assert math.dist((at.x, at.y, at.z), (0.0, 0.0, -HOME_DISTANCE)) < 1e-3
    assert abs(pose.orientation.w) > math.cos(math.radians(0.2) / 2)
    checked(trial.observer.commands)
    trial.observer.engage(False)


def test_disengaging_leaves_zeros_and_then_silence(trial):
    trial.go()
    trial.observer.engage(False)
    trial.rig.watch(0.6)
    after = [command for command in trial.observer.commands if command.is_zero]
    assert len(after) >= 3
    assert trial.observer.commands[-1].is_zero
    count = len(trial.observer.commands)
    trial.rig.watch(0.3)
    assert len(trial.observer.commands) == count


def test_halt_stops_at_once_and_latches_until_a_reset(trial):
    trial.go()
    publisher = trial.rig.node.create_publisher(Bool, 'controller/halt', 1)
    trial.rig.until(lambda: publisher.get_subscription_count() > 0)
    at = time.monotonic_ns()
    publisher.publish(Bool(data=True))
    trial.rig.until(lambda: trial.observer.state == 'faulted', what='state faulted')
    assert trial.observer.reason == 'halted'
    assert trial.observer.stopped_after(at) < 0.25
    refusal = trial.observer.engage()
    assert not refusal.success and 'halt' in refusal.message
    publisher.publish(Bool(data=False))
    trial.rig.until(lambda: trial.observer.reset().success, what='a reset')
    trial.rig.until(lambda: trial.observer.state == 'standby', what='state standby')
    trial.rig.node.destroy_publisher(publisher)


def test_a_second_publisher_is_refused_by_name(trial):
    from geometry_msgs.msg import TwistStamped
    trial.away()
    other = trial.rig.node.create_publisher(TwistStamped, 'camera_twist', 1)
    try:
        refusal = trial.rig.until(
            lambda: (answer := trial.observer.engage()) and not answer.success
            and 'second_publisher' in answer.message and answer, what='a refusal')
        assert '2 publishers' in refusal.message
    finally:
        trial.rig.node.destroy_publisher(other)


def test_the_overlay_is_drawn_for_whom_watches_only(trial, last):
    picture = last(Image, 'tracker/overlay')
    assert (picture.encoding, picture.width, picture.height) == ('bgr8', 640, 480)


def test_features_say_what_the_contract_says(trial, last):
    cloud = last(PointCloud2, 'features')
    assert [field.name for field in cloud.fields] == [
        'x', 'y', 'z', 'xn', 'yn', 'xn_goal', 'yn_goal', 'z_goal', 'weight', 'id']
    view = wire.view_from_cloud(cloud)
    assert cloud.header.frame_id == 'camera_optical_frame' and len(view) > 20
    image = last(Image, 'image')
    assert image.header.stamp.sec > 1_600_000_000


def test_a_killed_tracker_stops_the_arm_and_its_successor_resumes(trial):
    """SIGKILL: zero within 0.25 s and the reason; a new tracker loads the goal, motion returns."""
    trial.go()
    trial.rig.watch(0.2)
    at = time.monotonic_ns()
    trial.nodes['tracker'].send(signal.SIGKILL)
    trial.rig.until(lambda: trial.observer.state == 'holding', what='state holding')
    trial.rig.watch(0.3)
    assert trial.observer.reason == 'features_silent'
    assert trial.observer.stopped_after(at) <= 0.25
    trial.start('tracker')
    trial.rig.until(lambda: trial.observer.state in ('servoing', 'settled'), 20.0,
                    what='motion again')
    trial.observer.engage(False)


def test_the_last_commands_of_a_terminated_controller_are_zeros(trial):
    """SIGTERM while moving: at least three zeros come last, exit code 0, within a second."""
    trial.go()
    trial.rig.watch(0.1)
    at = time.monotonic()
    trial.nodes['controller'].send(signal.SIGTERM)
    code = trial.nodes['controller'].wait(3.0)
    assert code == 0 and time.monotonic() - at < 1.0
    trial.rig.watch(0.2)
    assert all(command.is_zero for command in trial.observer.commands[-3:])
    assert any(not command.is_zero for command in trial.observer.commands)
    trial.start('controller')
    trial.rig.until(lambda: trial.observer.states[-1][0] > at * 1e9
                    and trial.observer.state == 'standby', 20.0, what='standby again')


def test_a_restart_puts_the_camera_to_the_start_that_was_set(trial, last):
    trial.away(AWAY)
    answer = trial.rig.call(Trigger, 'simulator/restart')
    assert answer.success
    at = last(PoseStamped, 'true_pose').pose.position
    wanted = AWAY['start__translation']
    assert math.dist((at.x, at.y, at.z + HOME_DISTANCE), wanted) < 1e-6
