# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""The style sheet of the page, on a screen and on paper."""

from __future__ import annotations

from servo_nodes.report import palette

STYLE = f"""
:root {{ color-scheme: light; }}
* {{ box-sizing: border-box; }}
body {{ margin: 0; background: #eef1f3; color: {palette.INK};
  font: 15px/1.5 "Segoe UI", Roboto, "Helvetica Neue", "DejaVu Sans", Arial, sans-serif; }}
main {{ max-width: 1040px; margin: 0 auto; padding: 26px 40px 40px; background: {palette.PAPER}; }}
.title {{ margin: 0 0 10px; color: {palette.SOFT}; }}
header {{ display: flex; gap: 18px; align-items: flex-start; padding: 16px 20px;
  border-left: 8px solid {palette.SOFT}; background: #f5f7f8; }}
header.good {{ border-color: {palette.STATES['settled']}; background: #eef8f4; }}
header.bad {{ border-color: {palette.STATES['faulted']}; background: #fbf0f4; }}
header .sign {{ font-size: 30px; line-height: 1.15; }}
header.good .sign {{ color: #0c7357; }}
header.bad .sign {{ color: {palette.STATES['faulted']}; }}
h1 {{ margin: 0; font-size: 25px; line-height: 1.3; }}
header p {{ margin: 6px 0 0; }}
h2 {{ margin: 34px 0 10px; font-size: 18px; }}
h3 {{ margin: 18px 0 8px; font-size: 15px; }}
figure {{ margin: 0; }}
figcaption {{ margin-top: 5px; color: {palette.SOFT}; font-size: 13px; line-height: 1.4; }}
img {{ display: block; width: 100%; height: auto; }}
.stack {{ position: relative; }}
.stack .under {{ position: absolute; inset: 0; height: 100%; filter: contrast(0.75); }}
.stack img:last-child {{ position: relative; }}
.paths {{ max-width: 760px; }}
.row {{ display: grid; gap: 14px; grid-template-columns: repeat(3, 1fr); margin-top: 20px; }}
.around .row {{ margin-top: 0; }}
.tiles {{ display: grid; grid-template-columns: repeat(auto-fit, minmax(118px, 1fr));
  gap: 10px 18px; margin: 18px 0 4px; }}
.tiles b {{ display: block; font-size: 20px; line-height: 1.3; white-space: nowrap; }}
.tiles span {{ display: block; color: {palette.SOFT}; font-size: 13px; line-height: 1.35; }}
table {{ border-collapse: collapse; width: 100%; font-size: 14px; }}
th {{ text-align: left; font-weight: 600; color: {palette.SOFT}; font-size: 13px; }}
td, th {{ padding: 5px 14px 5px 0; border-bottom: 1px solid {palette.RULE}; vertical-align: top; }}
.chip i {{ display: inline-block; width: 11px; height: 11px; margin-right: 7px; }}
.chip {{ white-space: nowrap; }}
.stops td:nth-child(2), .stops td:nth-child(6) {{ white-space: nowrap; }}
.latency td {{ white-space: nowrap; }}
.bar {{ width: 45%; vertical-align: middle; }}
.bar i, .bar u {{ display: inline-block; height: 11px; background: {palette.GOAL}; }}
.bar u {{ opacity: 0.35; }}
.calm {{ color: {palette.SOFT}; }}
.facts {{ columns: 3; column-gap: 28px; }}
.facts div {{ margin-bottom: 14px; }}
.facts h3 {{ margin: 0 0 4px; font-size: 13px; break-after: avoid; }}
.facts table {{ font-size: 11.5px; }}
.facts td {{ padding: 1px 8px 1px 0; overflow-wrap: anywhere; line-height: 1.4; }}
.facts td:last-child {{ width: 38%; }}
.caution {{ margin: 34px 0 0; padding: 12px 16px; border: 1px solid {palette.SOFT};
  font-size: 13px; }}
footer {{ margin-top: 12px; color: {palette.SOFT}; font-size: 11.5px; }}
@media (max-width: 720px) {{
  main {{ padding: 16px; }}
  .row {{ grid-template-columns: 1fr; }}
  .facts {{ columns: 1; }}
}}
@media print {{
  @page {{ size: A4; margin: 13mm; }}
  body {{ background: none; font-size: 9.5pt; }}
  main {{ max-width: none; padding: 0; }}
  * {{ print-color-adjust: exact; -webkit-print-color-adjust: exact; }}
  figure, tr, header, .caution, .around h3 + .row {{ break-inside: avoid; }}
  h2, h3 {{ break-after: avoid; }}
  .facts table {{ font-size: 7pt; }}
  .paths {{ max-width: 150mm; }}
}}
"""
