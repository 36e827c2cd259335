# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The rooms and what each may import, also inside functions."""

from __future__ import annotations

import ast
import sys

import house_source as source
import pytest

LEAVES = {'values', 'motion', 'camera', 'goal', 'settings'}
ROS_BELOW = LEAVES | {'wire', 'tracking', 'control', 'simulation', 'report'}
MESSAGES = {'builtin_interfaces', 'diagnostic_msgs', 'geometry_msgs', 'lifecycle_msgs',
            'rcl_interfaces', 'rosgraph_msgs', 'sensor_msgs', 'std_msgs', 'std_srvs'}

# Room: (rooms below it, libraries it may use).
TABLE = {
    '__init__': (set(), set()),
    'values': (set(), {'numpy'}),
    'settings': (set(), set()),
    'motion': ({'values'}, {'numpy', 'transforms3d'}),
    'camera': ({'values'}, {'numpy', 'cv2'}),
    'goal': ({'values', 'camera'}, {'numpy', 'cv2', 'yaml'}),
    'wire': ({'values'}, {'numpy'}),
    'tracking': (LEAVES, {'numpy', 'cv2'}),
    'control': (LEAVES, {'numpy', 'scipy'}),
    'simulation': (LEAVES, {'numpy', 'cv2'}),
    'report': (LEAVES, {'numpy', 'cv2', 'matplotlib'}),
    'ros': (ROS_BELOW, {'numpy', 'cv2', 'yaml', 'rclpy', 'rpyutils', 'tf2_ros', 'bondpy',
                        'rosbags', 'ament_index_python', *MESSAGES}),
    'offline': (ROS_BELOW, {'numpy', 'cv2', 'scipy', 'yaml', 'rosbags', 'lz4', 'backports',
                            'compression'}),
}
CORES = ('tracking', 'control', 'simulation')
# What would let a clock, a file, a log, a network or hidden chance into a core.
WORLD = {'asyncio', 'concurrent', 'datetime', 'io', 'logging', 'multiprocessing', 'os', 'pathlib',
         'random', 'secrets', 'shutil', 'signal', 'socket', 'subprocess', 'sys', 'tempfile',
         'threading', 'time', 'warnings'}
OPTIONAL = {'matplotlib', 'rosbags', 'lz4', 'backports', 'compression', 'tf2_ros', 'bondpy',
            'distributed', 'psutil'}
MODULES = [pytest.param(path, id=source.name_of(path)) for path in source.modules()]


@pytest.mark.parametrize('path', MODULES)
def test_a_module_imports_only_what_its_room_may(path):
    room = source.room_of(path)
    assert room in TABLE, f'{source.name_of(path)}: no such room in the table'
    below, libraries = TABLE[room]
    for name, line, _ in source.imported(path):
        where = f'{source.name_of(path)}:{line} imports {name}'
        assert not name.startswith('.'), f'{where}: relative'
        first, *rest = name.split('.')
        if first == 'servo_nodes':
            target = rest[0] if rest else '__init__'
            allowed = target == room or target in below or target == '__version__'
            assert allowed, f'{where}: {room} may import {sorted(below)}'
        elif first not in sys.stdlib_module_names:
            assert first in libraries, f'{where}: {room} may import {sorted(libraries)}'


@pytest.mark.parametrize('path', [path for path in MODULES
                                  if source.room_of(path.values[0]) in CORES])
def test_a_core_knows_no_clock_no_file_no_log_and_no_hidden_chance(path):
    path_of = source.name_of(path)
    for name, line, _ in source.imported(path):
        assert name.split('.')[0] not in WORLD, f'{path_of}:{line} imports {name}'
    for node in ast.walk(source.tree_of(path)):
        if isinstance(node, ast.Call):
            called = ast.unparse(node.func)
            assert called not in ('open', 'print', 'input'), f'{path_of}:{node.lineno} {called}'
            seeded = called == 'np.random.default_rng' and node.args
            chance = called.startswith('np.random.') or called in ('cv2.randn', 'cv2.randu')
            assert seeded or not chance, f'{path_of}:{node.lineno} {called}: take the Generator'


@pytest.mark.parametrize('path', MODULES)
def test_optional_libraries_are_imported_where_they_are_used(path):
    """A node starts without matplotlib, rosbags or tf2."""
    for name, line, late in source.imported(path):
        if name.split('.')[0] in OPTIONAL:
            assert late, f'{source.name_of(path)}:{line} imports {name} at the top of the module'


def test_nothing_but_its_node_and_the_tools_know_the_simulator():
    """A robot runs with `simulation/` deleted."""
    users = {source.name_of(path) for path in source.modules()
             for name, _, _ in source.imported(path)
             if name.startswith('servo_nodes.simulation')}
    for user in users:
        room = user.split('/')[1]
        assert room in ('simulation', 'offline', 'ros'), user
    for node in ('tracker_node', 'controller_node'):
        reached = everything_below(f'servo_nodes.ros.{node}')
        assert not any(name.startswith('servo_nodes.simulation') for name in reached), node


def everything_below(module: str) -> set[str]:
    """Return the modules of the package that importing `module` loads at once."""
    reached, waiting = set(), [module]
    while waiting:
        name = waiting.pop()
        path = source.ROOT / (name.replace('.', '/') + '.py')
        if name in reached or not path.is_file():
            continue
        reached.add(name)
        waiting += [target for target, _, late in source.imported(path)
                    if target.startswith('servo_nodes') and not late]
        waiting += [target.rpartition('.')[0] for target, _, late in source.imported(path)
                    if target.startswith('servo_nodes') and not late]
    return reached


def test_the_walk_sees_imports_inside_functions(tmp_path, monkeypatch):
    """The check itself: a late import of a forbidden room is found."""
    monkeypatch.setattr(source, 'ROOT', tmp_path)
    monkeypatch.setattr(source, 'PACKAGE', tmp_path / 'servo_nodes')
    path = tmp_path / 'servo_nodes' / 'control' / 'sly.py'
    path.parent.mkdir(parents=True)
    path.write_text('def peek():\n    import time\n    from servo_nodes.tracking import tracker\n'
                    '    from servo_nodes import wire\n    return time, tracker, wire\n')
    found = set(source.imported(path))
    assert found == {('time', 2, True), ('servo_nodes.tracking.tracker', 3, True),
                     ('servo_nodes.wire', 4, True)}
    with pytest.raises(AssertionError, match='sly.py:3 imports servo_nodes.tracking.tracker'):
        test_a_module_imports_only_what_its_room_may(path)
    with pytest.raises(AssertionError, match='sly.py:2 imports time'):
        test_a_core_knows_no_clock_no_file_no_log_and_no_hidden_chance(path)
