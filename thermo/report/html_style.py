"""The page around a report: its skeleton and style, for phones, screens and paper."""

from __future__ import annotations

#: Nothing may be fetched and no script may run, whatever a title contains.
POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"

STYLE = """
:root { --ink: #1c2126; --soft: #59626b; --line: #d5dade; --paper: #fff; --tint: #f4f6f7;
  --good: #12714f; --open: #8a5a00; --bad: #a8321a; color-scheme: light; }
* { box-sizing: border-box; }
html { -webkit-text-size-adjust: 100%; text-size-adjust: 100%; }
body { margin: 0 auto; padding: 1.2rem 1rem 3rem; max-width: 60rem; color: var(--ink);
  background: var(--paper); font: 16px/1.5 system-ui, -apple-system, "Segoe UI", Roboto, sans-serif;
  overflow-wrap: break-word; }
h1 { font-size: 1.5rem; line-height: 1.25; margin: 0 0 .2rem; }
h2 { font-size: 1.15rem; margin: 2.2rem 0 .6rem; padding-bottom: .2rem;
  border-bottom: 1px solid var(--line); }
h3 { font-size: 1rem; margin: 1.2rem 0 .3rem; }
p { margin: .4rem 0; max-width: 46rem; }
.soft, figcaption, footer { color: var(--soft); font-size: .875rem; }
.verdict { margin: 1rem 0; padding: .8rem 1rem; border-left: .4rem solid; background: var(--tint); }
.verdict p { margin: 0; }
.verdict .word { font-weight: 700; text-transform: uppercase; letter-spacing: .04em;
  font-size: .8rem; }
.verdict .told { font-size: 1.1rem; }
.good { border-color: var(--good); } .good .word { color: var(--good); }
.open { border-color: var(--open); } .open .word { color: var(--open); }
.bad { border-color: var(--bad); } .bad .word { color: var(--bad); }
.key { display: flex; flex-wrap: wrap; gap: .4rem 1.6rem; margin: .8rem 0; padding: 0;
  list-style: none; }
.key b { font-variant-numeric: tabular-nums; }
table { border-collapse: collapse; width: 100%; font-size: .9rem;
  font-variant-numeric: tabular-nums; }
caption { text-align: left; color: var(--soft); font-size: .875rem; padding-bottom: .3rem; }
th, td { padding: .3rem .4rem; text-align: left; vertical-align: top;
  border-bottom: 1px solid var(--line); }
thead th { border-bottom: 2px solid var(--ink); }
td.n, th.n { text-align: right; }
td.n { white-space: nowrap; }
td.own { background: #fff3d6; font-weight: 600; }
tr.fallen { color: var(--soft); }
.scroll { overflow-x: auto; margin: .6rem 0; }
.scroll th[scope=row] { white-space: nowrap; }
td.words { min-width: 11rem; }
figure { margin: .8rem 0; }
.pictures { display: grid; gap: 0 1.2rem; grid-template-columns: minmax(0, 1fr); }
figure img { width: 100%; max-width: 34rem; height: auto; display: block; }
details { margin: .5rem 0; }
summary { cursor: pointer; padding: .3rem 0; }
pre { overflow: auto; max-height: 30rem; padding: .6rem; background: var(--tint);
  font-size: .78rem; line-height: 1.4; white-space: pre-wrap; }
code { font-size: .85em; overflow-wrap: anywhere; }
ul, ol { padding-left: 1.3rem; max-width: 46rem; } li { margin: .25rem 0; }
@media (min-width: 48rem) { .pictures { grid-template-columns: repeat(2, minmax(0, 1fr)); } }
@media (max-width: 36rem) {
  .scroll table { font-size: .82rem; } .scroll th, .scroll td { padding: .3rem .25rem; }
  table.stack thead { position: absolute; width: 1px; height: 1px; overflow: hidden;
    clip-path: inset(50%); }
  table.stack, table.stack caption, table.stack tbody, table.stack tr, table.stack td,
  table.stack th { display: block; }
  table.stack tr { display: grid; grid-template-columns: 1fr 1fr; gap: 0 .8rem; padding: .5rem 0;
    border-bottom: 1px solid var(--line); }
  table.stack th[scope=row], table.stack td.words { grid-column: 1 / -1; }
  table.stack td, table.stack th[scope=row] { border: 0; padding: .08rem 0; text-align: left;
    white-space: normal; }
  table.stack td:not(:empty)::before { content: attr(data-head) ": "; color: var(--soft); }
  table.stack td:empty { display: none; }
}
@page { margin: 16mm; }
@media print {
  body { padding: 0; max-width: none; font-size: 10pt; }
  h2, h3 { break-after: avoid; } figure, tr, .verdict, li, .scroll { break-inside: avoid; }
  .pictures { grid-template-columns: repeat(2, minmax(0, 1fr)); }
  pre { max-height: none; overflow: visible; } .scroll { overflow: visible; }
  .verdict, td.own { print-color-adjust: exact; -webkit-print-color-adjust: exact; }
}
"""


def page(title: str, body: str) -> str:
    """The whole document; ``title`` and ``body`` are HTML already."""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="referrer" content="no-referrer">\n'
        f"<title>{title}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n{body}\n</body>\n</html>\n"
    )
