# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Findings as JUnit XML, which CI systems read: no times, no host, the same bytes every time."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from collections.abc import Sequence

from servo_nodes.offline.verdict import Finding

_HEAD = '<?xml version="1.0" encoding="utf-8"?>\n'
# Characters that XML 1.0 cannot carry (section 2.2).
_FORBIDDEN = re.compile('[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]')


def text_from_findings(suite: str, findings: Sequence[Finding],
                       damages: Sequence[str] = ()) -> str:
    """Return the XML of one suite; what was not judged is skipped, damage is an error."""
    root = ET.Element('testsuites')
    failed = sum(finding.ok is False for finding in findings)
    skipped = sum(finding.ok is None for finding in findings)
    body = ET.SubElement(root, 'testsuite', name=_clean(suite), failures=str(failed),
                         tests=str(len(findings) + len(damages)), skipped=str(skipped),
                         errors=str(len(damages)))
    for finding in findings:
        case = ET.SubElement(body, 'testcase', classname='servo_replay', name=finding.name)
        if finding.ok is not None:
            ET.SubElement(case, 'system-out').text = _clean(finding.text)
        if finding.ok is False:
            ET.SubElement(case, 'failure', message=_clean(finding.text))
        elif finding.ok is None:
            ET.SubElement(case, 'skipped', message=_clean(finding.text))
    for number, damage in enumerate(damages, 1):
        case = ET.SubElement(body, 'testcase', classname='servo_replay', name=f'damage.{number}')
        ET.SubElement(case, 'error', message=_clean(damage))
    ET.indent(root)
    return _HEAD + ET.tostring(root, encoding='unicode') + '\n'


def _clean(text: str) -> str:
    return _FORBIDDEN.sub('?', text)
