# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Which topic plays which part."""

from __future__ import annotations

import pytest

from servo_nodes.offline.bags_topics import PARTS, topics_of_parts

IMAGE, INFO = 'sensor_msgs/msg/Image', 'sensor_msgs/msg/CameraInfo'
CLOUD = 'sensor_msgs/msg/PointCloud2'


def parts(kinds, **named):
    """Return the parts of topics that all have messages."""
    return topics_of_parts(kinds, dict.fromkeys(kinds, 9), named)


def test_the_topics_of_our_own_nodes_are_found_in_any_namespace():
    kinds = {f'/r1/servo/{name}': PARTS[part].kind for part, name in {
        'image': 'image', 'depth': 'depth', 'camera_info': 'camera_info', 'features': 'features',
        'command': 'camera_twist', 'state': 'controller/state', 'halt': 'controller/halt',
        'heartbeat': 'controller/heartbeat'}.items()}
    kinds['/r1/servo/tracker/overlay'] = IMAGE
    kinds['/clock'], kinds['/parameter_events'] = PARTS['clock'].kind, PARTS['parameters'].kind
    found = parts(kinds)
    assert set(found) == set(PARTS) - {'compressed'}
    assert found['image'] == '/r1/servo/image' and found['depth'] == '/r1/servo/depth'


def test_the_only_topic_of_a_type_plays_the_part_whatever_its_name():
    assert parts({'cam/odd_name': IMAGE})['image'] == 'cam/odd_name'


def test_a_topic_without_messages_plays_no_part():
    assert topics_of_parts({'/image': IMAGE}, {'/image': 0}, {}) == {}


def test_a_raw_image_wins_over_the_compressed_one():
    kinds = {'/image': IMAGE, '/image/compressed': PARTS['compressed'].kind}
    assert parts(kinds) == {'image': '/image'}


def test_the_calibration_beside_the_image_is_taken():
    kinds = {'/left/image_raw': IMAGE, '/left/camera_info': INFO, '/right/camera_info': INFO}
    assert parts(kinds)['camera_info'] == '/left/camera_info'
    kinds = {'/right/image/compressed': PARTS['compressed'].kind, '/left/camera_info': INFO,
             '/right/camera_info': INFO}
    assert parts(kinds)['camera_info'] == '/right/camera_info'


@pytest.mark.parametrize('kinds', [
    {'/a/image': IMAGE, '/b/image': IMAGE}, {'/a/one': CLOUD, '/b/two': CLOUD}])
def test_of_several_that_would_do_none_is_guessed(kinds):
    with pytest.raises(ValueError, match=r'expected one topic .*name it with --topics'):
        parts(kinds)


def test_a_named_topic_is_taken_with_or_without_its_slash():
    kinds = {'/a/image': IMAGE, '/b/image': IMAGE}
    assert parts(kinds, image='b/image')['image'] == '/b/image'
    assert parts({'a': IMAGE, 'b': IMAGE}, image='/b')['image'] == 'b'


@pytest.mark.parametrize(('named', 'words'), [
    ({'picture': '/image'}, "got 'picture'"), ({'imag': '/image'}, "did you mean 'image'"),
    ({'image': '/imag'}, "did you mean '/image'"),
    ({'features': '/image'}, 'expected sensor_msgs/msg/PointCloud2, got sensor_msgs/msg/Image')])
def test_a_wrong_name_is_refused_with_what_is_near(named, words):
    with pytest.raises(ValueError, match=words):
        parts({'/image': IMAGE}, **named)
