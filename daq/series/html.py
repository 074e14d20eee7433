"""The report as one HTML file: no script, no address, figures inside. The same report gives the same bytes."""

from __future__ import annotations

import base64
from collections.abc import Mapping

from daq.errors import MidspanError
from daq.series.blocks import Facts, Grid, Lines, Picture, Report

TEMPLATE = """\
<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{{ report.title }}{% for mark in report.marks %} - {{ mark }}{% endfor %}</title>
<style>
body { font-family: "DejaVu Sans", "Noto Sans", sans-serif; font-size: 14px; line-height: 1.45; color: #222;
  max-width: 1080px; margin: 0 auto; padding: 24px 20px 60px; }
h1 { font-size: 25px; margin: 0 0 2px; }
h2 { font-size: 17px; margin: 34px 0 8px; padding-bottom: 3px; border-bottom: 2px solid #222; }
p { margin: 6px 0; max-width: 92ch; }
.marks { margin: 10px 0 0; }
.mark { display: inline-block; border: 2.5px solid #D55E00; border-radius: 5px; color: #A84A00; font-weight: bold;
  padding: 2px 9px; margin-right: 8px; }
.loud { border-left: 5px solid #D55E00; padding-left: 10px; font-weight: bold; }
.caution { border-left: 5px solid #E69F00; padding-left: 10px; }
.wide { overflow-x: auto; }
table { border-collapse: collapse; margin: 8px 0 14px; font-variant-numeric: tabular-nums; }
th { text-align: right; vertical-align: bottom; border-bottom: 1.2px solid #222; font-size: 12px; padding: 3px 9px; }
td { text-align: right; border-bottom: 1px solid #E2E2E2; padding: 3px 9px; vertical-align: top; }
th.text, td.text { text-align: left; }
td.text { overflow-wrap: anywhere; }
table.facts { width: 100%; }
table.facts td { text-align: left; }
table.facts td:first-child { color: #555; white-space: nowrap; width: 12em; }
figure { margin: 12px 0; }
figure img { width: 100%; max-width: 1000px; display: block; }
figcaption { color: #555; font-size: 12.5px; }
@media print { body { padding: 0; } h2 { break-after: avoid; } tr, figure { break-inside: avoid; } }
</style>
</head>
<body>
<h1>{{ report.title }}</h1>
<p>{{ report.subtitle }}</p>
{% if report.marks %}<p class="marks">{% for mark in report.marks %}<span class="mark">{{ mark }}</span>{% endfor %}</p>
{% endif %}
{% for section in report.sections %}
<h2>{{ section.title }}</h2>
{% for block in section.blocks %}
{% set kind = kind_of(block) %}
{% if kind == "lines" %}{% for line in block.lines %}<p class="{{ block.tone.value }}">{{ line }}</p>
{% endfor %}{% elif kind == "facts" %}<table class="facts">
{% for name, value in block.rows %}<tr><td>{{ name }}</td><td>{{ value }}</td></tr>
{% endfor %}</table>
{% elif kind == "grid" %}<div class="wide"><table>
<thead><tr>{% for name in block.columns %}<th{% if loop.index0 in block.text %} class="text"{% endif %}>{{ name }}</th>\
{% endfor %}</tr></thead>
<tbody>
{% for row in block.rows %}<tr>{% for cell in row %}<td{% if loop.index0 in block.text %} class="text"{% endif %}>\
{{ cell }}</td>{% endfor %}</tr>
{% endfor %}</tbody></table></div>
{% elif kind == "picture" and block.name in pictures %}<figure>
<img alt="{{ block.caption }}" src="data:image/png;base64,{{ pictures[block.name] }}">
<figcaption>{{ block.caption }}</figcaption></figure>
{% endif %}{% endfor %}{% endfor %}
</body>
</html>
"""
KINDS = {Lines: "lines", Facts: "facts", Grid: "grid", Picture: "picture"}


def html_of(report: Report, figures: Mapping[str, bytes]) -> bytes:
    """figures: PNG bytes by name. Everything that came from cards and people is escaped."""
    try:
        from jinja2 import Environment
    except ImportError as error:
        raise MidspanError("the report needs jinja2: install midspan with the extra 'report'") from error
    environment = Environment(autoescape=True, trim_blocks=True, keep_trailing_newline=True)
    pictures = {name: base64.b64encode(data).decode("ascii") for name, data in figures.items()}
    page = environment.from_string(TEMPLATE).render(
        report=report, pictures=pictures, kind_of=lambda block: KINDS[type(block)]
    )
    return page.encode("utf-8")
