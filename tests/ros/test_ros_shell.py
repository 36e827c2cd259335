# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Nodes from outside: states, signals, parameters, quality of service, malformed inputs."""

from __future__ import annotations

import signal
import time

import numpy as np
import pytest
from diagnostic_msgs.msg import DiagnosticArray
from lifecycle_msgs.msg import State, Transition
from lifecycle_msgs.srv import ChangeState, GetState
from rcl_interfaces.srv import DescribeParameters, ListParameters
from rclpy.qos import DurabilityPolicy, ReliabilityPolicy
from sensor_msgs.msg import CameraInfo, Image, PointCloud2
from std_srvs.srv import Trigger

from servo_nodes import wire
from servo_nodes.ros import qos
from servo_nodes.ros.observer import Observer
from servo_nodes.values import Calibration
from servo_nodes.values import Image as Pixels

pytestmark = pytest.mark.processes
NODES = ('tracker', 'controller', 'simulator')


def state_of(rig, node):
    """Return the word of a node's lifecycle state."""
    return rig.call(GetState, f'{node}/get_state').current_state.label


def change(rig, node, transition):
    """Ask a node for a transition; return whether it succeeded."""
    request = ChangeState.Request(transition=Transition(id=transition))
    return rig.call(ChangeState, f'{node}/change_state', request).success


def calibration(**changes):
    """Return a plain calibration, 640x480."""
    k = (600., 0., 319.5, 0., 600., 239.5, 0., 0., 1.)
    return Calibration('camera', 640, 480, 'plumb_bob', (0.,) * 5, changes.get('k', k))


@pytest.fixture(scope='module')
def three(module_rig):
    """Return a rig on which the three nodes run."""
    for node in NODES:
        module_rig.start(node)
    for node in NODES:
        module_rig.until(lambda node=node: state_of(module_rig, node) == 'active', 20.0,
                         what=f'{node} active')
    return module_rig


@pytest.fixture(scope='module')
def descriptors(three):
    """Return what every parameter of every node says of itself."""
    found = {}
    for node in NODES:
        names = three.call(ListParameters, f'{node}/list_parameters').result.names
        answer = three.call(DescribeParameters, f'{node}/describe_parameters',
                            DescribeParameters.Request(names=names))
        found[node] = [item for item in answer.descriptors
                       if not item.name.startswith(('qos_overrides', 'use_sim_time',
                                                    'start_type_description_service'))]
    return found


def test_every_parameter_describes_itself(descriptors):
    """Each has words, and a range, choices, or is fixed, a switch or free text."""
    for node, items in descriptors.items():
        assert len(items) > 5
        for item in items:
            assert len(item.description) > 3, f'{node}: {item.name}'
            bounded = item.floating_point_range or item.integer_range
            assert bounded or item.type not in (2, 3) or item.additional_constraints, item.name


def test_the_caps_carry_unit_range_and_the_hard_cap_is_read_only(descriptors):
    by_name = {item.name: item for item in descriptors['controller']}
    linear = by_name['caps.linear']
    assert '[m/s]' in linear.description
    assert linear.floating_point_range[0].to_value == 0.25
    assert by_name['caps.hard_linear'].read_only and by_name['rate'].read_only


@pytest.mark.parametrize(('name', 'value', 'words'), [
    ('caps__linear', 0.3,
     'caps.linear: expected a finite number from 0.001 to 0.25 (m/s), got 0.3'),
    ('caps__linear', float('nan'), 'caps.linear: expected a finite number'),
    ('law__gain', float('inf'), 'law.gain: expected a finite number'),
    ('law__gain', 'fast', 'law.gain: expected a finite number'),
    ('watchdog__timeout', 0.0, 'watchdog.timeout: expected a finite number from 0.05 to 1'),
    ('law__kind', 'pionts', "did you mean 'points'?"),
    ('caps__axes', (1.0, 1.0), 'caps.axes: expected 6 finite numbers'),
    ('rate', 50.0, 'rate: expected 100.0 to stay while the node runs'),
    ('caps__hard_linear', 0.2, 'caps.hard_linear: expected 0.25 to stay'),
])
def test_a_bad_value_is_refused_with_its_sentence(three, name, value, words):
    refusals = three.set('controller', **{name: value})
    assert refusals and words in refusals[0]


def test_a_set_is_taken_whole_or_refused_whole(three):
    """A good value beside a bad one changes nothing."""
    assert three.set('controller', law__gain=2.0) == []
    assert three.set('controller', law__gain=3.0, caps__linear=9.0)
    assert three.set('controller', watchdog__crowd_slow=0.9, law__gain=4.0)[0].startswith(
        'watchdog.crowd_slow: expected at most watchdog.crowd_hold')
    from rcl_interfaces.srv import GetParameters
    value = three.call(GetParameters, 'controller/get_parameters',
                       GetParameters.Request(names=['law.gain'])).values[0]
    assert value.double_value == 2.0


def test_a_whole_number_serves_as_a_real_one(three):
    assert three.set('controller', law__gain=2) == []
    assert three.set('controller', caps__axes=(1, 1, 1, 1, 1, 1)) == []


ENDPOINTS = [('tracker', 'features'), ('tracker', 'tracker/overlay'),
             ('controller', 'camera_twist'), ('controller', 'controller/state'),
             ('simulator', 'image'), ('simulator', 'camera_info'), ('simulator', 'true_pose')]


@pytest.mark.parametrize(('node', 'topic'), ENDPOINTS)
def test_publishers_offer_what_the_table_says(three, node, topic):
    wanted = qos.PROFILES['out', topic.replace(f'{node}/', '~/')]
    info = three.until(lambda: [item for item in three.node.get_publishers_info_by_topic(
        f'/servo/{topic}') if item.node_name == node], what=f'publisher of {topic}')[0]
    assert info.qos_profile.reliability == wanted.reliability
    assert info.qos_profile.durability == wanted.durability
    if topic == 'camera_twist':
        assert info.qos_profile.deadline.nanoseconds == 100_000_000
        assert info.qos_profile.liveliness_lease_duration.nanoseconds == 300_000_000
        assert info.qos_profile.lifespan.nanoseconds == 200_000_000


@pytest.mark.parametrize(('node', 'topic'), [
    ('tracker', 'image'), ('tracker', 'camera_info'), ('tracker', 'depth'),
    ('controller', 'features'), ('controller', 'camera_info')])
def test_subscriptions_ask_for_little(three, node, topic):
    info = three.until(lambda: [item for item in three.node.get_subscriptions_info_by_topic(
        f'/servo/{topic}') if item.node_name == node], what=f'subscription to {topic}')[0]
    assert info.qos_profile.reliability == ReliabilityPolicy.BEST_EFFORT
    assert info.qos_profile.durability == DurabilityPolicy.VOLATILE


def test_engaging_without_a_goal_is_refused_with_the_remedy(three):
    observer = Observer(three)
    three.until(lambda: observer.state == 'standby' and observer.reason == 'too_few_points',
                10.0, what='empty features')
    answer = observer.engage()
    assert not answer.success
    assert 'expected at least 4 points, got 0' in answer.message and 'teach' in answer.message


def test_the_states_go_up_and_down_by_service(rig):
    """Without autostart nothing happens until it is asked for."""
    child = rig.start('controller', autostart=False)
    rig.until(lambda: state_of(rig, 'controller') == 'unconfigured', 20.0)
    assert change(rig, 'controller', Transition.TRANSITION_CONFIGURE)
    observer = Observer(rig)
    refusal = observer.engage()
    assert not refusal.success and 'active' in refusal.message
    assert change(rig, 'controller', Transition.TRANSITION_ACTIVATE)
    rig.until(lambda: observer.state == 'standby', what='state standby')
    assert change(rig, 'controller', Transition.TRANSITION_DEACTIVATE)
    assert observer.commands and all(command.is_zero for command in observer.commands[-3:])
    assert change(rig, 'controller', Transition.TRANSITION_CLEANUP)
    assert change(rig, 'controller', Transition.TRANSITION_CONFIGURE)
    assert change(rig, 'controller', Transition.TRANSITION_ACTIVATE)
    assert state_of(rig, 'controller') == 'active'
    assert child.end(signal.SIGTERM) == 0, child.said()
    assert State.PRIMARY_STATE_ACTIVE == 3


@pytest.mark.parametrize(('node', 'number'), [
    ('tracker', signal.SIGINT), ('controller', signal.SIGTERM), ('simulator', signal.SIGINT)])
def test_a_signal_ends_a_node_within_a_second_and_without_a_word_of_error(rig, node, number):
    child = rig.start(node)
    rig.until(lambda: state_of(rig, node) == 'active', 20.0, what='active')
    at = time.monotonic()
    child.send(number)
    child.send(number)
    assert child.wait(3.0) == 0
    assert time.monotonic() - at < 1.0
    assert 'Traceback' not in child.said() and 'ERROR' not in child.said()


def test_a_parameter_file_is_read_strictly(rig, tmp_path):
    """Whole numbers serve as real ones, and a misspelt name is warned about with the nearest."""
    path = tmp_path / 'parameters.yaml'
    path.write_text('/**:\n  ros__parameters:\n    law: {gain: 2, gian: 3.0}\n    rate: 50\n')
    child = rig.start('controller', arguments=('--params-file', str(path)))
    rig.until(lambda: state_of(rig, 'controller') == 'active', 20.0, what='active')
    rig.until(lambda: "did you mean 'law.gain'?" in child.said(), what='the warning')
    assert 'parameter law.gian: expected a known name' in child.said()


@pytest.mark.parametrize(('parameters', 'words'), [
    ({'output__frame': 'tool'}, 'output.from_camera'),
    ({'caps__linear': '.nan'}, 'caps.linear: expected a finite number'),
])
def test_a_node_with_unusable_parameters_says_one_sentence_and_ends(rig, parameters, words):
    child = rig.start('controller', **parameters)
    assert child.wait(20.0) == 2
    said = [line for line in child.said().splitlines() if 'rmw_fastrtps' not in line]
    assert len(said) == 1 and words in said[0], said


class Camera:
    """A camera driver of our own, best effort, for what no good driver sends."""

    def __init__(self, rig, prefix=''):
        self._rig = rig
        self._image = rig.node.create_publisher(Image, f'{prefix}image', 5)
        self._info = rig.node.create_publisher(CameraInfo, f'{prefix}camera_info', 5)
        rig.until(lambda: self._image.get_subscription_count()
                  and self._info.get_subscription_count(), 20.0, what='a tracker')

    def calibrate(self, given):
        """Publish a calibration."""
        message = CameraInfo()
        wire.fill_camera_info(message, given, self._now())
        self._info.publish(message)

    def show(self, **changes):
        """Publish a noisy image, with fields changed."""
        message = Image()
        pixels = np.random.default_rng(3).integers(0, 255, (480, 640), np.uint8)
        wire.fill_image(message, Pixels(pixels, 'mono8', self._now(), 'camera'))
        for name, value in changes.items():
            setattr(message, name, value)
        self._image.publish(message)

    def _now(self):
        return self._rig.node.get_clock().now().nanoseconds


MALFORMED = [({'encoding': 'plasma8'}, 'expected one of mono8'),
             ({'width': 0, 'height': 0}, 'image size: expected'),
             ({'step': 10}, 'image step: expected at least 640 bytes'),
             ({'height': 4000}, 'image data: expected at least')]


def test_malformed_images_are_dropped_and_counted_and_the_tracker_lives(rig):
    """The first is said in words, the others counted; good images are looked at as before."""
    child = rig.start('tracker')
    camera, got, lines = Camera(rig), [], []
    rig.node.create_subscription(PointCloud2, 'features', got.append, 10)
    rig.node.create_subscription(DiagnosticArray, '/diagnostics', lines.append, 10)
    camera.calibrate(calibration())

    def dropped():
        for line in lines:
            for item in line.status[0].values:
                if item.key == 'dropped_image':
                    return int(item.value)
        return 0
    for changes, words in MALFORMED:
        lines.clear()
        rig.until(lambda: lines and child.runs, 20.0)
        before = dropped()

        def counted(changes=changes, before=before):
            camera.show(**changes)
            rig.watch(0.1)
            return any(item.key == 'dropped_image' and int(item.value) > before
                       for line in lines for item in line.status[0].values)
        rig.until(counted, 20.0, what=words)
    assert MALFORMED[0][1] in child.said() and not got

    def alive():
        camera.show()
        rig.watch(0.05)
        return got
    rig.until(alive, what='features')
    assert got[-1].width == 0 and child.runs


def test_an_uncalibrated_camera_is_refused_by_both_nodes(rig):
    """CameraInfo with k[0] = 0 means: not calibrated (REP 104)."""
    tracker = rig.start('tracker')
    rig.start('controller', output__listener_required=False)
    camera, observer = Camera(rig), Observer(rig)

    def refused():
        camera.calibrate(calibration(k=(0.,) * 9))
        camera.show()
        rig.watch(0.05)
        return observer.reason == 'no_camera' and 'k' in observer.states[-1][2]['detail'] and (
            'camera_info' in tracker.said())
    rig.until(refused, 20.0, what='a refusal')
    answer = observer.engage()
    assert not answer.success and 'no_camera' in answer.message


def test_camera_info_is_found_beside_a_remapped_image(rig):
    rig.start('tracker', remap={'image': '/wrist/image_raw'})
    rig.until(lambda: rig.node.get_subscriptions_info_by_topic('/wrist/camera_info'), 20.0,
              what='a subscription beside the image')


def test_a_camera_info_that_is_remapped_itself_wins(rig):
    rig.start('tracker', remap={'image': '/wrist/image_raw', 'camera_info': '/calibration'})
    rig.until(lambda: rig.node.get_subscriptions_info_by_topic('/calibration'), 20.0,
              what='a subscription where it was asked for')
    assert not rig.node.get_subscriptions_info_by_topic('/wrist/camera_info')


def test_a_profile_can_be_overridden_by_parameter(rig):
    rig.start('tracker', arguments=(
        '-p', 'qos_overrides./servo/image.subscription.reliability:=reliable'))
    info = rig.until(lambda: rig.node.get_subscriptions_info_by_topic('/servo/image'), 20.0)[0]
    assert info.qos_profile.reliability == ReliabilityPolicy.RELIABLE


def test_a_wrong_goal_is_one_sentence_and_no_end(rig, tmp_path):
    folder = tmp_path / 'goal'
    folder.mkdir()
    (folder / 'goal.yaml').write_text('format: 77\n')
    child = rig.start('tracker', goal__folder=str(folder))
    rig.until(lambda: 'expected format' in child.said(), 20.0, what='the sentence')
    answer = rig.call(Trigger, 'tracker/teach')
    assert not answer.success and 'expected an image' in answer.message
    assert 'Traceback' not in child.said() and child.runs
