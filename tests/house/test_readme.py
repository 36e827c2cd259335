# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""README.md says what the code does."""

from __future__ import annotations

import re
import shlex

import house_source as source
import pytest
import readme_tables
import test_package

TEXT = (source.ROOT / 'README.md').read_text(encoding='utf-8')
GUIDE = (source.ROOT / 'DEVELOPERS.md').read_text(encoding='utf-8')


def section(heading: str, text: str = TEXT) -> str:
    """Return what stands between a heading of the second level and the next one."""
    found = re.search(rf'^## {re.escape(heading)}\n(.*?)(?=^## |\Z)', text, re.S | re.M)
    assert found, f'README.md has no heading {heading!r}'
    return found[1]


def command_of(heading: str) -> str:
    """Return the one command line of a section."""
    blocks = re.findall(r'^```(?:bash|sh|console)?\n(.*?)^```$', section(heading), re.S | re.M)
    assert len(blocks) == 1, f'{heading}: expected one fenced block, got {len(blocks)}'
    lines = blocks[0].splitlines()
    assert len(lines) == 1, f'{heading}: expected one command line, got {len(lines)}'
    return lines[0]


@pytest.mark.parametrize(('heading', 'extras', 'ends'), [
    ('Run it', {'standalone', 'report'}, '.venv/bin/servo_demo'),
    ('Test it', {'standalone', 'report', 'bags', 'test'}, 'pytest')])
def test_one_line_sets_everything_up_and_runs(heading, extras, ends):
    command = command_of(heading)
    words = shlex.split(command)
    assert words[:4] == ['python3', '-m', 'venv', '.venv']
    wanted = next(word for word in words if word.startswith('.['))
    assert set(wanted[2:-1].split(',')) == extras
    assert ends in command.split('&&')[-1]


def test_the_generated_parts_are_those_of_the_code():
    """Run `python tests/house/readme_tables.py` after a change of a setting."""
    assert readme_tables.rewritten(TEXT) == TEXT
    written = set(re.findall(r'<!-- generated: ([\w ]+) -->', TEXT))
    assert written == set(readme_tables.parts())


def test_a_stale_table_would_be_noticed():
    stale = TEXT.replace('| `law.gain` |', '| `law.gian` |')
    assert stale != TEXT
    assert readme_tables.rewritten(stale) == TEXT


def test_every_reason_is_explained():
    from servo_nodes.values import Reason
    assert set(readme_tables.MEANINGS) == {
        reason.value for reason in Reason if reason is not Reason.NONE}


def test_the_executables_are_those_of_the_package():
    listed = set(re.findall(r'`(\w+)(?: [A-Z]+)?`', ''.join(
        row.split('|')[1] for row in section('Tools').splitlines() if row.startswith('| `'))))
    assert listed == set(test_package.entry_points())


@pytest.mark.parametrize(('tool', 'option'), sorted(
    {(tool, option) for tool, words in re.findall(r'`(servo_\w+)( [^`\n]*)`', TEXT)
     for option in re.findall(r'--[\w-]+', words)}))
def test_every_option_that_is_shown_exists(tool, option):
    module = test_package.entry_points()[tool].split(':')[0].rsplit('.', 1)[0]
    room = source.ROOT / module.replace('.', '/')
    words = ''.join(path.read_text(encoding='utf-8') for path in room.glob('*.py'))
    assert f"'{option}'" in words, f'{tool} {option}'


def test_the_cautions_stand_before_the_first_command():
    before = TEXT[:TEXT.index('## Run it')]
    for words in ('not a safety-rated function', 'emergency stop', 'people out\n> of reach',
                  'first runs at reduced speed', 'time out stale commands itself', '0.5 s or less',
                  'a killed process cannot send zero', "robot's manual", 'licensed integrator'):
        plain = re.sub(r'[*>\s]+', ' ', before)
        assert re.sub(r'[*>\s]+', ' ', words) in plain, words


def test_the_guide_names_every_room_and_nothing_that_is_gone():
    for room in (*source.ROOMS, 'values', 'motion', 'camera', 'goal', 'settings', 'wire'):
        assert re.search(rf'`(servo_nodes/)?{room}(\.py|/)`', GUIDE), room
    for text in (TEXT, GUIDE):
        for name in re.findall(r'`((?:servo_nodes|tests|config|launch)/[\w./-]*\w)`', text):
            assert (source.ROOT / name).exists(), name


def topics_of_readme() -> set[tuple[str, str, str, str]]:
    """Return (node, kind, name, type) of every row of the table of topics."""
    return {(cells[0], cells[1], cells[2].strip('`'), cells[3].strip('`'))
            for line in section('Put it into a stack').splitlines()
            if line.startswith('| ') and '`' in line
            for cells in [[cell.strip() for cell in line.strip('|').split('|')]]
            if cells[1] in ('pub', 'sub', 'srv')}


def _plain(kind: str) -> str:
    return kind.replace('/msg/', '/').replace('/srv/', '/')


OWN = {'/rosout', '/parameter_events', '/clock'}


def used_by(node) -> set[tuple[str, str, str, str]]:
    """Return (node, kind, name, type) of what a node really opened, as the README writes it."""
    name, space = node.get_name(), node.get_namespace().rstrip('/')
    opened = (('pub', node.get_publisher_names_and_types_by_node),
              ('sub', node.get_subscriber_names_and_types_by_node),
              ('srv', node.get_service_names_and_types_by_node))
    found = set()
    for kind, ask in opened:
        for topic, types in ask(name, space or '/'):
            written = topic
            if topic.startswith(f'{space}/{name}/'):
                written = '~/' + topic[len(f'{space}/{name}/'):]
            elif space and topic.startswith(space + '/'):
                written = topic[len(space) + 1:]
            if topic in OWN or _plain(types[0]).startswith(('rcl_interfaces', 'lifecycle_msgs',
                                                            'type_description_interfaces')):
                continue
            found.add((name, kind, written, _plain(types[0])))
    return found


@pytest.mark.parametrize('name', ['tracker', 'controller', 'simulator'])
def test_the_topics_are_those_that_the_nodes_open(name):
    rclpy = pytest.importorskip('rclpy', reason='no ROS 2 here')
    module = __import__(f'servo_nodes.ros.{name}_node', fromlist=['main'])
    rclpy.init(args=['--ros-args', '-r', '__ns:=/readme', '-p', 'autostart:=false'],
               domain_id=97)
    node = getattr(module, f'{name.capitalize()}Node')()
    try:
        assert node.configure() == ''
        node.activate()
        seen = used_by(node)
        node.deactivate()
        node.cleanup()
    finally:
        node.destroy_node()
        rclpy.shutdown()
    written = {(who if who != 'all' else name, *rest) for who, *rest in topics_of_readme()
               if who in (name, 'all')}
    assert seen == written
