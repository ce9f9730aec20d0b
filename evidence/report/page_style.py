"""The look of the page: light and dark, on a telephone and on A4."""

__all__ = ["STYLE"]

STYLE = """
:root { color-scheme: light dark; --paper: #ffffff; --ink: #1a1a1a; --soft: #555555;
  --line: #c4c4c4; --faint: #bfbfbf; --alert: #9c3d00; --panel: #f5f5f2; --blue: #0072b2; }
@media (prefers-color-scheme: dark) {
  :root { --paper: #16181a; --ink: #ececec; --soft: #b4b4b4; --line: #55585c; --faint: #6b6e72;
    --alert: #ffb088; --panel: #202327; --blue: #56b4e9; }
}
* { box-sizing: border-box; }
html { -webkit-text-size-adjust: 100%; text-size-adjust: 100%; }
body { margin: 0 auto; padding: 1.2rem 1rem 3rem; max-width: 60rem; background: var(--paper);
  color: var(--ink); font: 1rem/1.5 system-ui, "Segoe UI", "Helvetica Neue", Arial, sans-serif;
  overflow-wrap: anywhere; }
h1 { font-size: 1.6rem; line-height: 1.25; margin: 0.4rem 0 0.8rem; }
h2 { font-size: 1.25rem; margin: 2.4rem 0 0.6rem; border-bottom: 1px solid var(--line); }
h3 { font-size: 1.05rem; margin: 1.5rem 0 0.4rem; }
p, ul, dl { margin: 0.5rem 0; }
ul { padding-left: 1.2rem; }
.verdict { font-size: 1.15rem; font-weight: 600; }
.soft { color: var(--soft); font-size: 0.9rem; }
.alert { color: var(--alert); font-weight: 600; }
.wide { overflow-x: auto; max-width: 100%; margin: 0.6rem 0; }
.wide:focus-visible { outline: 2px solid currentColor; outline-offset: 2px; }
table { border-collapse: collapse; font-size: 0.88rem; }
caption { text-align: left; font-weight: 600; padding: 0.2rem 0; }
th, td { padding: 0.25rem 0.7rem 0.25rem 0; text-align: right; vertical-align: top;
  font-weight: normal; }
thead th { border-bottom: 1px solid var(--ink); vertical-align: bottom; font-weight: 600;
  overflow-wrap: normal; }
tbody tr + tr > * { border-top: 1px solid var(--line); }
th, td { overflow-wrap: break-word; }
.words { text-align: left; max-width: 26em; }
.sentence { min-width: 15em; }
.number { white-space: nowrap; font-variant-numeric: tabular-nums; }
.pictures { display: grid; grid-template-columns: repeat(auto-fit, minmax(min(100%, 20rem), 1fr));
  gap: 1rem 1.6rem; align-items: start; }
figure { margin: 0.6rem 0; max-width: 27rem; }
figure svg { display: block; width: 100%; height: auto; color: var(--ink); }
figure svg * { stroke-linejoin: round; stroke-linecap: butt; }
figcaption { color: var(--soft); font-size: 0.85rem; margin-top: 0.3rem; }
dt { font-weight: 600; margin-top: 0.5rem; }
dd { margin: 0; }
dl.facts { display: grid; grid-template-columns: minmax(8em, max-content) 1fr; gap: 0.15rem 1rem; }
dl.facts dt { margin: 0; }
dl.facts dd { font-size: 0.92rem; }
code { font-family: ui-monospace, Consolas, "DejaVu Sans Mono", monospace; font-size: 0.9em;
  background: var(--panel); padding: 0.1em 0.3em; }
nav ul { list-style: none; padding: 0; display: flex; flex-wrap: wrap; gap: 0.2rem 1.1rem; }
a { color: inherit; }
@media (max-width: 30rem) { dl.facts { grid-template-columns: 1fr; } dl.facts dd {
  margin-bottom: 0.4rem; } }
@page { size: A4; margin: 16mm 15mm; }
@media print {
  :root { color-scheme: light; --paper: #ffffff; --ink: #000000; --soft: #333333; --line: #999999;
    --faint: #bfbfbf; --alert: #7a2f00; --panel: #ffffff;
    --blue: #0072b2; }
  html { font-size: 9.5pt; }
  body { max-width: none; padding: 0; }
  nav { display: none; }
  h2, h3, h2 + p, caption { break-after: avoid; }
  figure, tr, li, .wide { break-inside: avoid; }
  .wide { overflow: visible; }
  table { font-size: 7.5pt; }
  th, td { padding-right: 0.4rem; }
  .sentence { min-width: 8em; }
  .pictures { grid-template-columns: 85mm 85mm; gap: 4mm 8mm; }
  figure { max-width: 85mm; }
}
"""
