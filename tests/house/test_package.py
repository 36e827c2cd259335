# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The package as colcon, rosdep and pip see it."""

from __future__ import annotations

import ast
import configparser
import functools
import os
import re
import runpy
import sys
from xml.etree import ElementTree

import house_source as source
import pytest

import servo_nodes

# Import name: rosdep key. A message package is its own key.
KEYS = {'numpy': 'python3-numpy', 'cv2': 'python3-opencv', 'scipy': 'python3-scipy',
        'transforms3d': 'python3-transforms3d', 'yaml': 'python3-yaml',
        'matplotlib': 'python3-matplotlib'}
# Used where they are installed, named with their remedy where they are not.
OPTIONAL = {'tf2_ros', 'bondpy', 'rosbags', 'lz4', 'backports', 'compression', 'distributed',
            'psutil'}
# Import name: the wheel that brings it.
WHEELS = {'cv2': 'opencv-python-headless', 'yaml': 'PyYAML', 'backports': 'backports.zstd',
          'compression': 'backports.zstd'}


@functools.cache
def setup_arguments() -> dict:
    """Return what setup.py hands to setuptools."""
    setuptools = pytest.importorskip('setuptools', reason='no setuptools here')
    caught: dict = {}
    real = setuptools.setup
    setuptools.setup = lambda **arguments: caught.update(arguments)
    before = os.getcwd()
    try:
        os.chdir(source.ROOT)
        runpy.run_path('setup.py')
    finally:
        setuptools.setup = real
        os.chdir(before)
    return caught


@functools.cache
def manifest() -> ElementTree.Element:
    """Return the root of package.xml."""
    return ElementTree.parse(source.ROOT / 'package.xml').getroot()


def entry_points() -> dict[str, str]:
    """Return every executable and what it calls."""
    lines = setup_arguments()['entry_points']['console_scripts']
    return dict(line.replace(' ', '').split('=') for line in lines)


def third_party() -> set[str]:
    """Return every library that the package imports."""
    names = {name.split('.')[0] for path in source.modules()
             for name, _, _ in source.imported(path)}
    return names - set(sys.stdlib_module_names) - {'servo_nodes'}


def test_the_manifest_is_of_format_3_and_builds_with_ament_python():
    root = manifest()
    assert root.attrib['format'] == '3'
    assert root.findtext('name') == 'servo_nodes'
    assert root.findtext('license') == 'Apache-2.0'
    assert root.findtext('export/build_type') == 'ament_python'
    maintainer = root.find('maintainer')
    assert maintainer.text == 'servo_nodes maintainers'
    assert maintainer.attrib['email'].endswith('@example.org')


def test_one_version_everywhere():
    assert manifest().findtext('version') == servo_nodes.__version__
    assert setup_arguments()['version'] == servo_nodes.__version__


def test_the_manifest_names_every_import_and_nothing_else_that_is_imported():
    named = {item.text for item in manifest().iter('exec_depend')}
    wanted = {KEYS.get(name, name) for name in third_party() - OPTIONAL}
    assert wanted <= named, wanted - named
    launchers = {'launch_ros', 'launch_xml', 'ros2launch'}
    assert named <= wanted | launchers, named - wanted - launchers


def test_pip_brings_what_is_imported():
    arguments = setup_arguments()

    def names(requirements):
        return {re.split('[<>=!~;]', item)[0].strip() for item in requirements}
    extras = {key: names(value) for key, value in arguments['extras_require'].items()}
    everywhere = names(arguments['install_requires']) | extras['report'] | extras['bags']
    for name in third_party() - {'tf2_ros', 'bondpy', 'distributed', 'psutil'}:
        wheel = WHEELS.get(name, name)
        ros = 'ros-' + name.replace('_', '-')
        assert wheel in everywhere or ros in extras['standalone'], name
    assert 'ros-rmw-fastrtps-cpp' in extras['standalone']


def test_every_executable_has_its_main():
    points = entry_points()
    assert {'tracker_node', 'controller_node', 'simulator_node', 'servo_demo'} <= set(points)
    for name, target in points.items():
        module, function = target.split(':')
        path = source.ROOT / (module.replace('.', '/') + '.py')
        assert path.is_file(), f'{name}: {module}'
        defined = {node.name for node in source.tree_of(path).body
                   if isinstance(node, ast.FunctionDef)}
        assert function in defined, f'{name}: {target}'


def test_setup_cfg_sends_executables_where_ros2_run_looks():
    parser = configparser.ConfigParser()
    parser.read(source.ROOT / 'setup.cfg', encoding='utf-8')
    assert parser['install']['install_scripts'] == '$base/lib/servo_nodes'
    assert parser['develop']['script_dir'] == '$base/lib/servo_nodes'
    assert not any('-' in key for section in ('install', 'develop') for key in parser[section])


@pytest.mark.parametrize(('command', 'place'), [
    (['--single-version-externally-managed', '--record=r'], None),
    (['--prefix=p', '--single-version-externally-managed', '--record=r'], 'lib/servo_nodes'),
    (['--install-scripts=$base/lib/servo_nodes'], 'lib/servo_nodes')])
def test_pip_gets_executables_on_the_path_and_colcon_in_lib(command, place, monkeypatch):
    pytest.importorskip('setuptools', reason='no setuptools here')
    from setuptools import Distribution
    monkeypatch.chdir(source.ROOT)
    distribution = Distribution({**setup_arguments(), 'script_args': ['install', *command]})
    distribution.parse_config_files()
    distribution.parse_command_line()
    install = distribution.get_command_obj('install')
    install.ensure_finalized()
    if place is None:
        assert install.install_scripts.rstrip('/').rsplit('/', 1)[-1] in ('bin', 'Scripts')
    else:
        assert install.install_scripts.endswith(place)


def test_everything_a_launch_needs_is_installed():
    installed = {name for _, files in setup_arguments()['data_files'] for name in files}
    assert 'package.xml' in installed and 'resource/servo_nodes' in installed
    for folder in ('launch', 'config'):
        for path in (source.ROOT / folder).iterdir():
            assert source.name_of(path) in installed, source.name_of(path)
    assert (source.ROOT / 'resource' / 'servo_nodes').is_file()


def test_the_top_level_holds_only_what_it_must():
    allowed = {'README.md', 'DEVELOPERS.md', 'package.xml', 'setup.py', 'setup.cfg', 'servo_nodes',
               'launch', 'config', 'tests', 'resource', 'LICENSE'}
    top = {path.relative_to(source.ROOT).parts[0] for path in source.kept_files()}
    assert {name for name in top if not name.startswith('.')} <= allowed


def test_every_xml_file_is_well_formed():
    for path in source.kept_files():
        if path.suffix == '.xml':
            ElementTree.parse(path)
