# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Launch and parameter files name only what exists, and say it rightly."""

from __future__ import annotations

import re
from pathlib import Path
from xml.etree import ElementTree

import house_source as source
import pytest
import readme_tables
import test_package
import yaml

LAUNCH = sorted((source.ROOT / 'launch').glob('*.xml'))
CONFIG = sorted((source.ROOT / 'config').glob('*.yaml'))
NODES = readme_tables.NODES
# Files in config/ that hold no parameters of our nodes.
OTHERS = {'analyzers.yaml'}
ARGUMENTS = {'namespace', 'params_file', 'use_sim_time', 'autostart', 'log_level'}
OF_ROS = {'use_sim_time', 'qos_overrides'}


def flattened(values: dict, prefix: str = ''):
    """Yield (dotted name, value)."""
    for name, value in values.items():
        if isinstance(value, dict):
            yield from flattened(value, f'{prefix}{name}.')
        else:
            yield prefix + str(name), value


def sections(path: Path):
    """Yield (node or None for all, dotted name, value) of a parameter file."""
    content = yaml.safe_load(path.read_text(encoding='utf-8'))
    assert isinstance(content, dict) and content, f'{path.name}: empty'
    for key, body in content.items():
        assert re.match(r'/\*\*(/|$)', key), f'{path.name}: {key} fits one namespace only'
        node = None if key == '/**' else key.rsplit('/', 1)[1]
        assert node is None or node in NODES, f'{path.name}: no node {node}'
        for name, value in flattened(body['ros__parameters']):
            yield node, name, value


def meanings(node: str | None, name: str) -> list:
    """Return the definitions that a name has in a node, or in any of them."""
    nodes = NODES if node is None else (node,)
    return [known[name] for known in map(readme_tables.known_of, nodes) if name in known]


PARAMETER_FILES = [pytest.param(path, id=path.name) for path in CONFIG if path.name not in OTHERS]


def test_there_is_something_to_check():
    assert {path.name for path in LAUNCH} >= {
        'loop.launch.xml', 'simulation.launch.xml', 'replay.launch.xml'}
    assert PARAMETER_FILES


@pytest.mark.parametrize('path', PARAMETER_FILES)
def test_every_parameter_of_a_file_is_known_and_allowed(path):
    for node, name, value in sections(path):
        if name.split('.')[0] in OF_ROS:
            continue
        found = meanings(node, name)
        assert found, f'{path.name}: {name} is no parameter of {node or "any node"}'
        for definition in found:
            definition.check(value)


@pytest.mark.parametrize('path', PARAMETER_FILES)
def test_a_file_teaches(path):
    """Every parameter stands below or beside a comment, and a departure from the default says so.

    The word *default* in the comment tells what it would be otherwise.
    """
    lines = path.read_text(encoding='utf-8').splitlines()
    for node, name, value in sections(path):
        leaf = name.rsplit('.', 1)[-1]
        spots = [i for i, line in enumerate(lines) if re.match(rf'\s*{leaf}:', line)]
        assert spots, f'{path.name}: {name}'
        notes = [' '.join(line for line in (*comments_above(lines, i), lines[i]) if '#' in line)
                 for i in spots]
        assert any(notes), f'{path.name}: {name} has no comment'
        for definition in meanings(node, name):
            given = definition.check(value)
            assert given == definition.default or any('default' in note for note in notes), (
                f'{path.name}: {name} is {given!r}; name the default, {definition.default!r}')


def comments_above(lines: list[str], at: int) -> list[str]:
    """Return the comment lines straight above a line."""
    found: list[str] = []
    while at > 0 and lines[at - 1].lstrip().startswith('#'):
        at -= 1
        found.append(lines[at])
    return found


LAUNCH_FILES = [pytest.param(path, id=path.name) for path in LAUNCH]


def root_of(path: Path) -> ElementTree.Element:
    """Return the root of a launch file."""
    return ElementTree.parse(path).getroot()


@pytest.mark.parametrize('path', LAUNCH_FILES)
def test_every_argument_is_described_and_used_and_no_other_is(path):
    root = root_of(path)
    assert root.tag == 'launch'
    declared = {item.attrib['name']: item for item in root.iter('arg')
                if 'value' not in item.attrib}
    for name, item in declared.items():
        assert len(item.attrib.get('description', '')) > 10, f'{name}: no description'
    text = path.read_text(encoding='utf-8')
    used = set(re.findall(r'\$\(var (\w+)\)', text))
    made = {item.attrib['name'] for item in root.iter('let')}
    assert used <= set(declared) | made, used - set(declared) - made
    assert set(declared) <= used, f'declared and never used: {set(declared) - used}'


@pytest.mark.parametrize('path', LAUNCH_FILES)
def test_the_arguments_that_every_team_expects_are_there(path):
    root = root_of(path)
    if not list(root.iter('node')):
        return
    assert {item.attrib['name'] for item in root.iter('arg')} >= ARGUMENTS


@pytest.mark.parametrize('path', LAUNCH_FILES)
def test_every_node_of_a_launch_file_is_one_of_ours_with_known_parameters(path):
    points = test_package.entry_points()
    for node in root_of(path).iter('node'):
        if node.attrib['pkg'] != 'servo_nodes':
            continue
        executable = node.attrib['exec']
        assert executable in points, executable
        name = node.attrib['name']
        assert executable == f'{name}_node', f'{executable} is named {name}'
        known = readme_tables.known_of(name)
        for item in node.iter('param'):
            if 'from' not in item.attrib:
                given = item.attrib['name']
                assert given in known or given.split('.')[0] in OF_ROS, f'{name}: {given}'


def names_of(node: str) -> set[str]:
    """Return the topics and services that a node opens, from the README's checked table."""
    import test_readme
    return {name for who, _, name, _ in test_readme.topics_of_readme() if who in (node, 'all')}


@pytest.mark.parametrize('path', LAUNCH_FILES)
def test_every_remapped_name_is_one_that_the_node_opens(path):
    for node in root_of(path).iter('node'):
        if node.attrib['pkg'] == 'servo_nodes':
            for item in node.iter('remap'):
                assert item.attrib['from'] in names_of(node.attrib['name']), item.attrib['from']
    opened = set().union(*map(names_of, NODES))
    for item in root_of(path).iter('set_remap'):
        assert item.attrib['from'] in opened, item.attrib['from']


@pytest.mark.parametrize('path', LAUNCH_FILES)
def test_every_file_that_a_launch_file_names_exists(path):
    text = path.read_text(encoding='utf-8')
    named = re.findall(r'\$\(find-pkg-share servo_nodes\)/([\w./-]+)', text)
    for name in named:
        assert (source.ROOT / name).is_file(), name
    assert not re.findall(r'"/(?!\*)[a-z]+/[\w/]+\.(?:yaml|xml)"', text), 'a path of one machine'
