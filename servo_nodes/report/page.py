# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Write a record as one page: the verdict in words, then figures, pictures and facts.

The page is a single HTML file without scripts that asks nobody for anything: a policy in its head
forbids every request, pictures are inside. The same record gives the same bytes.
"""

from __future__ import annotations

import base64
import html
import math
import pathlib

import numpy as np

from servo_nodes.report import palette
from servo_nodes.report.drawing import Drawing
from servo_nodes.report.figures import drawings
from servo_nodes.report.record import Picture, Record, Scalar
from servo_nodes.report.stops import Stop, stops
from servo_nodes.report.style import STYLE
from servo_nodes.values import SECOND_NS, Stamp

MOST_STOPS = 40
CAUTIONS = (
    'This loop is not a safety-rated function. Keep an emergency stop in hand and people out of '
    'reach; make first runs at reduced speed. The driver of the arm must time out stale commands '
    'itself, within 0.5 s or less, because a killed process cannot send zero. Local codes, the '
    'manual of the robot and a licensed integrator come first.')


def write(record: Record, path: str | pathlib.Path) -> None:
    """Draw a record and write its page.

    Raises
    ------
    MissingExtra
        When matplotlib is not installed.
    OSError
        When the file cannot be written.
    """
    pathlib.Path(path).write_text(page(record, drawings(record)), encoding='utf-8')


def page(record: Record, figures: list[Drawing]) -> str:
    """Return the HTML of a record with its figures."""
    found = stops(record)
    parts = [
        _head(record), _verdict(record), _tiles(record),
        _views(record), _stop_table(record, found),
        *(_figure(figure) for figure in figures if figure.name == 'time'),
        _stop_pictures(record, found),
        *(_figure(figure) for figure in figures if figure.name != 'time'),
        _latency(record), f'<p class="caution">{CAUTIONS}</p>', _facts(record),
        f'<footer>record {record.digest()}</footer></main></body></html>\n']
    return '\n'.join(part for part in parts if part)


def _head(record: Record) -> str:
    return f"""<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="Content-Security-Policy" \
content="default-src 'none'; img-src data:; style-src 'unsafe-inline'">
<title>{html.escape(record.title)}</title>
<style>{STYLE}</style></head><body><main>
<p class="title">{html.escape(record.title)}</p>"""


def _verdict(record: Record) -> str:
    verdict = record.verdict
    kind, mark = {True: ('good', '&#10003;'), False: ('bad', '&#10005;'),
                  None: ('open', '&#9675;')}[verdict.ok]
    return (f'<header class="{kind}"><span class="sign">{mark}</span><div>'
            f'<h1>{html.escape(verdict.headline)}</h1>'
            f'<p>{html.escape(verdict.text)}</p></div></header>')


def _tiles(record: Record) -> str:
    """Return the few numbers that everybody asks for."""
    found: list[tuple[str, str]] = [
        (name, _word(value)) for name, value in record.facts.get('Result', {}).items()]
    latency = record.series.get('latency')
    if latency is not None:
        whole = latency.values.sum(axis=1)
        found.append(('image to command, median', f'{np.median(whole):.0f} ms'))
    points = record.series.get('points')
    if points is not None:
        found.append(('points seen, median', f'{np.median(points.values):.0f}'))
    found.append(('stops', str(len(stops(record)))))
    cells = ''.join(f'<div><b>{html.escape(value)}</b><span>{html.escape(name)}</span></div>'
                    for name, value in found)
    return f'<section class="tiles">{cells}</section>'


def _views(record: Record) -> str:
    shown = [picture for name in ('start', 'end', 'goal')
             if (picture := record.picture(name)) is not None]
    if not shown:
        return ''
    return f'<section class="row three">{"".join(map(_picture, shown))}</section>'


def _stop_table(record: Record, found: list[Stop]) -> str:
    if not found:
        return '' if not record.events else '<p class="calm">No stop in this run.</p>'
    rows = ''.join(
        f'<tr><td class="chip"><i style="background:{_colour(stop)}"></i>'
        f'{html.escape(stop.span.event.state)}</td>'
        f'<td>{_at(record, stop.span.start)}</td>'
        f'<td><b>{_spoken(stop.span.event.reason)}</b><br>{html.escape(stop.span.event.text)}'
        f'{"".join(f"<br>then {_spoken(reason)}" for reason in stop.then)}</td>'
        f'<td>{_milliseconds(stop.reaction)}</td><td>{_milliseconds(stop.braking)}</td>'
        f'<td>{stop.span.seconds:.2f} s</td></tr>' for stop in found[:MOST_STOPS])
    if len(found) > MOST_STOPS:
        rows += f'<tr><td colspan="6">and {len(found) - MOST_STOPS} more</td></tr>'
    return ('<section><h2>Every stop</h2><table class="stops"><tr><th>state</th><th>at</th>'
            '<th>why</th><th>last points heard to exact zero</th><th>decision to exact zero</th>'
            f'<th>lasted</th></tr>{rows}</table></section>')


def _stop_pictures(record: Record, found: list[Stop]) -> str:
    """Return the pictures around each stop, beside its reason."""
    left = [picture for picture in record.pictures if picture.name == 'stop']
    if not left:
        return ''
    groups: dict[int, list[Picture]] = {}
    for picture in left:
        nearest = min(range(len(found)), key=lambda i: _distance(found[i], picture.stamp),
                      default=-1)
        groups.setdefault(nearest, []).append(picture)
    rows = []
    for index in sorted(groups):
        title = 'Pictures' if index < 0 else (
            f'Around {_spoken(found[index].span.event.reason)} at '
            f'{_at(record, found[index].span.start)}')
        pictures = sorted(groups[index], key=lambda picture: picture.stamp)
        cells = ''.join(_picture(picture, f'{_at(record, picture.stamp)}: ')
                        for picture in pictures)
        rows.append(f'<h3>{title}</h3><div class="row three">{cells}</div>')
    return f'<section class="around">{"".join(rows)}</section>'


def _distance(stop: Stop, stamp: Stamp) -> int:
    return max(stop.span.start - stamp, stamp - stop.span.end, 0)


def _figure(drawing: Drawing) -> str:
    under = '' if drawing.under is None else (
        f'<img class="under" alt="" src="{_uri(drawing.under.media, drawing.under.data)}">')
    return (f'<section><h2>{html.escape(drawing.title)}</h2><figure class="{drawing.name}">'
            f'<div class="stack">{under}<img alt="{html.escape(drawing.title)}" '
            f'src="{_uri(drawing.media, drawing.data)}"></div>'
            f'<figcaption>{html.escape(drawing.caption)}</figcaption></figure></section>')


def _latency(record: Record) -> str:
    """Return where the time goes between image and command, as a table with bars."""
    series = record.series.get('latency')
    if series is None:
        return ''
    columns = [*series.values.T, series.values.sum(axis=1)]
    names = [*series.labels, 'together']
    if len(series.labels) == 1:
        columns, names = columns[:1], names[:1]
    most = max(float(np.nanpercentile(column, 99)) for column in columns) or 1.0
    rows = ''
    for name, column in zip(names, columns, strict=True):
        low, high, top = np.nanpercentile(column, [50, 95, 100])
        rows += (f'<tr><td>{html.escape(name)}</td><td>{low:.1f}</td><td>{high:.1f}</td>'
                 f'<td>{top:.1f}</td><td class="bar"><i style="width:{100 * low / most:.0f}%">'
                 f'</i><u style="width:{100 * min(1, (high - low) / most):.0f}%"></u></td></tr>')
    return ('<section><h2>From image to command</h2><table class="latency"><tr><th>stage</th>'
            '<th>median, ms</th><th>95 %, ms</th><th>most, ms</th><th></th></tr>'
            f'{rows}</table></section>')


def _facts(record: Record) -> str:
    blocks = ''
    for heading, facts in record.facts.items():
        rows = ''.join(f'<tr><td>{html.escape(name)}</td><td>{html.escape(_word(value))}</td></tr>'
                       for name, value in facts.items())
        blocks += f'<div><h3>{html.escape(heading)}</h3><table>{rows}</table></div>'
    return f'<section><h2>Facts</h2><div class="facts">{blocks}</div></section>' if blocks else ''


def _picture(picture: Picture, before: str = '') -> str:
    return (f'<figure><img alt="{html.escape(picture.caption)}" '
            f'src="{_uri(picture.media, picture.data)}">'
            f'<figcaption>{before}{html.escape(picture.caption)}</figcaption></figure>')


def _uri(media: str, data: bytes) -> str:
    return f'data:{media};base64,{base64.b64encode(data).decode()}'


def _spoken(reason: str) -> str:
    return html.escape(reason.replace('_', ' '))


def _at(record: Record, stamp: Stamp) -> str:
    return f'{(stamp - record.origin) / SECOND_NS:.2f} s'


def _milliseconds(seconds: float | None) -> str:
    return 'not known' if seconds is None else f'{1000 * seconds:.0f} ms'


def _colour(stop: Stop) -> str:
    return palette.STATES.get(stop.span.event.state, palette.SOFT)


def _word(value: Scalar) -> str:
    if isinstance(value, bool):
        return 'true' if value else 'false'
    if isinstance(value, float):
        return f'{value:.6g}' if math.isfinite(value) else 'not known'
    return str(value) or 'none'
