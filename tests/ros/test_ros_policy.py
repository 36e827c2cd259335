# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The security policy names every topic and service of the running nodes, and no other."""

from __future__ import annotations

import pathlib
from xml.etree import ElementTree

import pytest

pytestmark = pytest.mark.processes
POLICY = pathlib.Path(__file__).resolve().parents[2] / 'config' / 'servo.policy.xml'
NODES = ('tracker', 'controller', 'simulator')
# Opened only when a parameter asks for it.
BY_PARAMETER = {'/servo/image/compressed', '/clock'}


def allowed(node):
    """Return (kind, access) -> full names, as the policy has them for a node."""
    root = ElementTree.parse(POLICY).getroot()
    profile, = [item for item in root.iter('profile') if item.attrib['node'] == node]
    found = {}
    for group in profile:
        for access in group.attrib:
            names = found.setdefault((group.tag, access), set())
            for item in group:
                name = item.text.replace('~', f'/servo/{node}')
                names.add(name if name.startswith('/') else f'/servo/{name}')
    return found


@pytest.fixture(scope='module')
def graph(module_rig):
    """Return the three nodes' own entries in the graph, complete."""
    for node in NODES:
        module_rig.start(node)
    watcher = module_rig.node

    def names(node):
        return {
            ('services', 'reply'): {name for name, _ in
                                    watcher.get_service_names_and_types_by_node(node, '/servo')},
            ('topics', 'publish'): {name for name, _ in
                                    watcher.get_publisher_names_and_types_by_node(node, '/servo')},
            ('topics', 'subscribe'): {
                name for name, _ in
                watcher.get_subscriber_names_and_types_by_node(node, '/servo')}}

    def known(node):
        return (node, '/servo') in watcher.get_node_names_and_namespaces()

    def complete():
        return all(map(known, NODES)) and all(
            wanted - BY_PARAMETER <= names(node)[kind]
            for node in NODES for kind, wanted in allowed(node).items())
    try:
        module_rig.until(complete, 20.0, what='what the policy names')
    except TimeoutError:
        pass
    return {node: names(node) for node in NODES}


@pytest.mark.parametrize('node', NODES)
def test_the_policy_names_what_a_node_opens_and_nothing_else(graph, node):
    policy = allowed(node)
    # Older distributions do not offer the type description.
    optional = BY_PARAMETER | {f'/servo/{node}/get_type_description'}
    for kind, opened in graph[node].items():
        assert opened <= policy[kind], f'{kind}: not allowed: {sorted(opened - policy[kind])}'
        assert policy[kind] <= opened | optional, (
            f'{kind}: allowed for nothing: {sorted(policy[kind] - opened - optional)}')
