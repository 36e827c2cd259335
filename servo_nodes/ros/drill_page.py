# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The drill's results as one self-contained page."""

from __future__ import annotations

import html
import os
import platform
from collections.abc import Mapping, Sequence

from servo_nodes.ros.diagnostics import versions

STYLE = """
body { font: 16px/1.5 system-ui, sans-serif; max-width: 64rem; margin: 2rem auto; padding: 0 1rem;
       color: #1d2429; background: #fff }
table { border-collapse: collapse; width: 100% }
th, td { text-align: left; padding: .35rem .6rem; border-bottom: 1px solid #d5dbe0 }
td.number { text-align: right; font-variant-numeric: tabular-nums }
.bar { background: #e6eaed; height: .5rem; width: 8rem; border-radius: 2px; overflow: hidden }
.bar div { background: #2f6f8f; height: 100% }
.bad { color: #a11d12; font-weight: 600 } .good { color: #1c6b33 } .skipped { color: #6b7680 }
.bad .bar div { background: #a11d12 }
"""


def page(results: Sequence[Mapping[str, object]]) -> str:
    """Return the HTML of the table, worst figures and all."""
    bad = sum(row['ok'] is False for row in results)
    skipped = sum(row['ok'] is None for row in results)
    verdict = (f'{bad} of {len(results)} rows failed' if bad
               else 'Every row that ran held its bound')
    facts = ', '.join(f'{key} {value}' for key, value in {
        **versions(), 'machine': platform.machine(), 'cores': os.cpu_count()}.items())
    rows = '\n'.join(_row(row) for row in results)
    return f"""<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>Fault drill</title>
<style>{STYLE}</style></head><body><h1>Fault drill</h1>
<p class="{'bad' if bad else 'good'}">{verdict}; {skipped} not run.</p>
<p>Each fault was injected into a moving loop of real processes. The worst figure of all runs
counts; it was measured at a subscriber in another process, from the last good message or from the
fault to exact zero, unless the reaction says otherwise.</p>
<table><thead><tr><th>row</th><th>fault</th><th>reaction</th><th>worst</th><th>bound</th><th></th>
<th>runs</th><th>verdict</th></tr></thead><tbody>
{rows}
</tbody></table><p>{html.escape(facts)}</p></body></html>
"""


def _row(row: Mapping[str, object]) -> str:
    kind, word = {True: ('good', 'held'), False: ('bad', 'failed'),
                  None: ('skipped', 'not run')}[row['ok']]  # type: ignore[index]
    worst, bound = row['worst_s'], float(str(row['bound_s']))
    share = min(100.0, 100.0 * float(str(worst)) / bound) if worst is not None and bound else 0.0
    cells = [str(row['id']), str(row['fault']), str(row['reaction'])]
    text = ''.join(f'<td>{html.escape(cell)}</td>' for cell in cells)
    figure = 'never' if worst is None and row['ok'] is False else _seconds(worst)
    note = f' ({html.escape(str(row["note"]))})' if row['ok'] is not True else ''
    return (f'<tr class="{kind}">{text}<td class="number">{figure}</td>'
            f'<td class="number">{_seconds(bound)}</td>'
            f'<td><div class="bar"><div style="width:{share:.0f}%"></div></div></td>'
            f'<td class="number">{row["runs"]}</td><td>{word}{note}</td></tr>')


def _seconds(value: object) -> str:
    if value is None or float(str(value)) == 0.0:
        return '–'
    return f'{1000 * float(str(value)):.0f} ms'
