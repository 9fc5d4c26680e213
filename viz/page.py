"""The frame of the report: HTML and style without scripts or links, for screen (light and dark) and paper."""

from __future__ import annotations

from string import Template

__all__ = ["PAGE"]

_STYLE = """
:root { color-scheme: light dark; --ink: #16202b; --soft: #4a5665; --page: #ffffff; --card: #f3f5f8;
  --line: #cfd6de; --accent: #00478f; --warn: #fff4d6; --warn-line: #b58105; }
@media (prefers-color-scheme: dark) { :root { --ink: #e8edf2; --soft: #b3bfcc; --page: #12181f;
  --card: #1c252f; --line: #3a4653; --accent: #8cc4ff; --warn: #3a2f10; --warn-line: #d9a93a; } }
* { box-sizing: border-box; }
body { margin: 0; background: var(--page); color: var(--ink);
  font: 16px/1.5 system-ui, -apple-system, "Segoe UI", "Liberation Sans", Arial, sans-serif; }
main { max-width: 62rem; margin: 0 auto; padding: 2rem 1.25rem 3rem; }
h1 { font-size: 1.7rem; line-height: 1.25; margin: 0 0 .25rem; overflow-wrap: anywhere; }
h2 { font-size: 1.2rem; margin: 2.4rem 0 .6rem; padding-bottom: .2rem; border-bottom: 1px solid var(--line); }
h3 { font-size: 1rem; margin: 1.4rem 0 .4rem; }
p { margin: .5rem 0; max-width: 48rem; }
.lead { font-size: 1.25rem; max-width: none; }
.lead strong { color: var(--accent); white-space: nowrap; }
.soft { color: var(--soft); }
.facts { display: grid; grid-template-columns: repeat(auto-fill, minmax(13.5rem, 1fr)); gap: .6rem;
  margin: 1.2rem 0; }
.facts div { background: var(--card); border: 1px solid var(--line); border-radius: .4rem;
  padding: .5rem .75rem; }
.facts dt { color: var(--soft); font-size: .85rem; }
.facts dd { margin: 0; font-weight: 600; overflow-wrap: anywhere; }
.caution { background: var(--warn); border-left: .3rem solid var(--warn-line); padding: .6rem .9rem;
  margin: 1.2rem 0; }
.caution p { margin: .1rem 0; max-width: none; }
.table { overflow-x: auto; }
table { border-collapse: collapse; width: 100%; margin: .6rem 0; font-size: .95rem; }
caption { text-align: left; color: var(--soft); padding-bottom: .3rem; }
th, td { padding: .35rem .7rem; border-bottom: 1px solid var(--line); text-align: right;
  vertical-align: top; }
th:first-child, td:first-child { text-align: left; padding-left: 0; overflow-wrap: anywhere; }
td.text, th.text { text-align: left; }
th { font-weight: 600; }
td { font-variant-numeric: tabular-nums; }
figure { margin: 0; background: #ffffff; color: #16202b; border: 1px solid var(--line); border-radius: .4rem;
  padding: .5rem; break-inside: avoid; }
figure img { display: block; width: 100%; height: auto; }
figcaption { font-size: .88rem; padding: .35rem .25rem 0; color: #3a4653; }
.pictures { display: grid; grid-template-columns: repeat(2, 1fr); gap: .8rem; }
.pictures .wide { grid-column: 1 / -1; }
@media (max-width: 44rem) { .pictures { grid-template-columns: 1fr; } }
pre { background: var(--card); border: 1px solid var(--line); border-radius: .4rem; padding: .6rem .8rem;
  overflow-x: auto; font-size: .85rem; white-space: pre-wrap; overflow-wrap: anywhere; }
code { overflow-wrap: anywhere; }
ul { padding-left: 1.2rem; max-width: 48rem; }
footer { margin-top: 2.5rem; border-top: 1px solid var(--line); padding-top: .6rem; font-size: .88rem; }
@media print { :root { --ink: #000; --soft: #333; --page: #fff; --card: #fff; --line: #999; --accent: #000;
  --warn: #fff; --warn-line: #000; } main { max-width: none; padding: 0; } body { font-size: 11pt; }
  h2 { break-after: avoid; } tr, .facts, .caution { break-inside: avoid; } pre { white-space: pre-wrap; } }
"""

#: Placeholders hold HTML that is already escaped.
PAGE = Template(
    """<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>$name: mean escape time</title>
<style>"""
    + _STYLE
    + """</style>
</head>
<body>
<main>
$body
</main>
</body>
</html>
"""
)
