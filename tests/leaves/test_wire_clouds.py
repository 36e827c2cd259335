# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Wire: views as point clouds there and back, whoever published them."""

from __future__ import annotations

import array
import struct
import types

import message_shapes
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from servo_nodes import wire
from servo_nodes.values import View

STAND_INS = message_shapes.look_alikes()


def some_view(count: int, seed: int = 0) -> View:
    """Return a view of `count` points; some depths are unknown."""
    rng = np.random.default_rng(seed)
    depths = rng.uniform(0.3, 0.6, count)
    depths[::3] = np.nan
    return View(77_000_000_001, 'eye', rng.normal(size=(count, 2)), rng.normal(size=(count, 2)),
                depths, rng.uniform(0.3, 0.6, count), rng.uniform(size=count),
                rng.integers(0, 2 ** 32, count))


def cloud_of(messages, view: View):
    """Return the `features` message of a view."""
    message = messages.PointCloud2()
    wire.fill_cloud(message, view, messages.PointField)
    return message


@pytest.mark.parametrize('count', [0, 1, 4, 100])
def test_views_come_back_in_single_precision(messages, count):
    sent = some_view(count)
    message = cloud_of(messages, sent)
    assert (message.height, message.width) == (1, count)
    assert [field.name for field in message.fields] == list(wire.FIELDS)
    back = wire.view_from_cloud(message)
    assert (back.stamp, back.frame_id) == (sent.stamp, 'eye')
    for name in ('points_xy', 'goal_xy', 'depths', 'goal_depths', 'weights'):
        assert_allclose(getattr(back, name), getattr(sent, name), rtol=1e-6, err_msg=name)
    assert_array_equal(back.ids, sent.ids)


def test_an_empty_cloud_says_nothing_seen_whatever_its_fields(messages):
    message = messages.PointCloud2()
    message.header.stamp.sec, message.header.frame_id = 3, 'eye'
    view = wire.view_from_cloud(message)
    assert (len(view), view.stamp, view.frame_id) == (0, 3_000_000_000, 'eye')


def test_viewers_find_the_points_in_space_and_nan_where_depth_is_unknown(messages):
    sent = some_view(6)
    message = cloud_of(messages, sent)
    xyz = np.frombuffer(message.data, np.float32).reshape(6, -1)[:, :3]
    assert_allclose(xyz[1], [*(sent.points_xy[1] * sent.depths[1]), sent.depths[1]], rtol=1e-6)
    assert np.isnan(xyz[0]).all()
    assert not message.is_dense
    assert message.point_step * 6 == message.row_step == len(message.data)


def test_fields_are_found_by_name_wherever_they_lie_in_either_byte_order(messages):
    """Another publisher may add fields, reorder them, pad its points and swap its bytes."""
    sent = some_view(3, seed=4)
    names = ['intensity', *reversed(wire.FIELDS)]
    columns = {'xn': sent.points_xy[:, 0], 'yn': sent.points_xy[:, 1],
               'xn_goal': sent.goal_xy[:, 0], 'yn_goal': sent.goal_xy[:, 1], 'z': sent.depths,
               'z_goal': sent.goal_depths, 'weight': sent.weights, 'id': sent.ids}
    data = b''
    for i in range(3):
        for name in names:
            value = columns.get(name, np.zeros(3))[i]
            data += struct.pack('>I' if name == 'id' else '>f', value)
        data += b'pad!'
    message = messages.PointCloud2()
    message.header.frame_id = 'eye'
    message.height, message.width = 1, 3
    message.point_step = 4 * len(names) + 4
    message.row_step = 3 * message.point_step
    message.is_bigendian = True
    message.fields = [messages.PointField(name=name, offset=4 * i, count=1,
                                          datatype=wire.UINT32 if name == 'id' else wire.FLOAT32)
                      for i, name in enumerate(names)]
    message.data = array.array('B', data)
    back = wire.view_from_cloud(message)
    assert_allclose(back.points_xy, sent.points_xy, rtol=1e-6)
    assert_allclose(back.goal_depths, sent.goal_depths, rtol=1e-6)
    assert_array_equal(back.ids, sent.ids)


def test_an_organised_cloud_is_read_row_by_row(messages):
    sent = some_view(6)
    message = cloud_of(messages, sent)
    message.height, message.width, message.row_step = 2, 3, 3 * message.point_step
    assert_array_equal(wire.view_from_cloud(message).ids, sent.ids)
    message.row_step += 4
    with pytest.raises(ValueError, match='features row_step: expected 120 bytes, .* got 124'):
        wire.view_from_cloud(message)


@pytest.mark.parametrize('name', wire.FIELDS)
def test_a_missing_or_mistyped_field_is_named(messages, name):
    message = cloud_of(messages, some_view(2))
    fields = list(message.fields)
    message.fields = [field for field in fields if field.name != name]
    with pytest.raises(ValueError, match=f"features: expected a field '{name}', got x, |got y, "):
        wire.view_from_cloud(message)
    message.fields = fields
    field = next(field for field in message.fields if field.name == name)
    field.datatype = 8
    with pytest.raises(ValueError, match=f'features field {name}: expected datatype [67] inside'):
        wire.view_from_cloud(message)


def test_a_field_outside_its_point_is_refused(messages):
    message = cloud_of(messages, some_view(2))
    fields = list(message.fields)
    fields[4].offset = message.point_step - 2
    message.fields = fields
    with pytest.raises(ValueError, match='features field yn: expected datatype 7 inside'):
        wire.view_from_cloud(message)


def test_a_cloud_of_the_wrong_length_is_refused(messages):
    message = cloud_of(messages, some_view(4))
    message.data = array.array('B', bytes(message.data)[:-1])
    with pytest.raises(ValueError, match='features data: expected 160 bytes for 4 .* got 159'):
        wire.view_from_cloud(message)
    message.width = 30000
    with pytest.raises(ValueError, match='features: expected at most 20000 points, got 30000'):
        wire.view_from_cloud(message)


@given(st.binary(max_size=200), st.integers(0, 50), st.integers(0, 3), st.integers(0, 60),
       st.lists(st.tuples(st.sampled_from(wire.FIELDS), st.integers(0, 60), st.integers(1, 8)),
                max_size=12))
def test_no_cloud_whatever_breaks_the_reader(data, width, height, point_step, fields):
    """It answers with a view or refuses with a ValueError; nothing else comes out."""
    message = STAND_INS.PointCloud2()
    message.width, message.height, message.point_step = width, height, point_step
    message.row_step, message.data = width * point_step, data
    message.fields = [types.SimpleNamespace(name=name, offset=offset, datatype=kind, count=1)
                      for name, offset, kind in fields]
    try:
        view = wire.view_from_cloud(message)
    except ValueError as error:
        assert 'features' in str(error)
    else:
        assert len(view) == width * height
