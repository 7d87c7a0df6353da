"""How a page looks: on a screen of any width, light or dark, and on paper."""

from __future__ import annotations

from procgen.report.pictures.style import FIGURE, SANS, SERIF, variables

_PAGE = """
* { box-sizing: border-box; }
html { -webkit-text-size-adjust: 100%; text-size-adjust: 100%; scroll-behavior: smooth; }
body { margin: 0 auto; max-width: 80rem; padding: 2.2rem 1.4rem 4rem; background: var(--paper); color: var(--ink);
  font: 16px/1.5 SERIF; overflow-wrap: anywhere; }
header { border-bottom: 3px solid var(--ink); padding-bottom: 1.2rem; }
h1 { font-size: 2rem; line-height: 1.15; font-weight: 600; margin: 0; text-wrap: balance; }
h2 { font-size: 1.45rem; line-height: 1.2; margin: 0 0 .5rem; }
h3 { font: 600 .95rem/1.35 SANS; margin: 0 0 .35rem; }
p { margin: .35rem 0; max-width: 52rem; }
.verdict { font-size: 1.35rem; line-height: 1.25; margin: .7rem 0 .5rem; font-weight: 600; }
.verdict.agrees, td.agrees { color: var(--good); } .verdict.departs, td.departs { color: var(--bad); }
.verdict.untestable, td.untestable, td.reported { color: var(--open); }
.facts { color: var(--soft); font-size: .95rem; }
nav ul { display: flex; flex-wrap: wrap; gap: .2rem 1.1rem; margin: .8rem 0 0; padding: 0; list-style: none;
  font: .9rem/1.6 SANS; }
a { color: var(--stated); }
section { margin-top: 2.2rem; padding-top: 1.1rem; border-top: 1px solid var(--line); }
main > section:first-child { margin-top: 1rem; border-top: 0; }
.unit { color: var(--soft); font-weight: 400; }
ul.found { padding: 0; list-style: none; margin: .8rem 0; }
ul.found > li { background: var(--card); border: 1px solid var(--line); border-left: .35rem solid var(--alarm);
  padding: .55rem .9rem; margin: .5rem 0; max-width: 70rem; }
.found p.cause { margin: 0; max-width: none; font-size: 1.08rem; line-height: 1.42; }
.found .effects { margin: .3rem 0 0; color: var(--soft); font: .85rem/1.45 SANS; }
.found ul.effects { padding: 0 0 0 .9rem; border-left: 2px solid var(--line); list-style: none; }
.found ul.effects li + li { margin-top: .15rem; }
ul.plain { padding-left: 1.2rem; margin: .4rem 0; max-width: 60rem; }
pre { font: 13px/1.5 ui-monospace, SFMono-Regular, Menlo, Consolas, "DejaVu Sans Mono", monospace; margin: .6rem 0;
  background: var(--card); border: 1px solid var(--line); padding: .7rem .9rem; white-space: pre-wrap; }
.figures { display: grid; grid-template-columns: repeat(2, minmax(0, 1fr)); gap: 1.1rem; margin-top: 1rem; }
figure { margin: 0; background: var(--card); border: 1px solid var(--line); padding: .9rem 1rem .8rem;
  break-inside: avoid; min-width: 0; }
figcaption { font: .875rem/1.45 SANS; color: var(--ink); margin-top: .35rem; }
details { margin-top: .5rem; }
figure details { font: .8rem/1.4 SANS; margin-top: .45rem; }
summary { cursor: pointer; color: var(--soft); font: .85rem/1.5 SANS; }
summary:hover { color: var(--ink); }
.scroll { overflow-x: auto; border: 1px solid var(--line); background: var(--card); margin-top: .5rem; }
figure .scroll { border: 0; max-height: 22rem; overflow-y: auto; }
table { border-collapse: collapse; width: 100%; font: 13px/1.45 SANS; font-variant-numeric: tabular-nums;
  overflow-wrap: normal; }
figure table { font-size: 12px; width: auto; }
th, td { padding: .3rem .6rem; text-align: left; vertical-align: top; border-bottom: 1px solid var(--line); }
th { color: var(--soft); font-weight: 600; }
td.n, th.n { text-align: right; white-space: nowrap; }
.checks td:nth-child(2) { min-width: 9rem; } .checks td:nth-child(3) { min-width: 7rem; }
.checks th.n { white-space: normal; } td.note { min-width: 12rem; color: var(--soft); overflow-wrap: anywhere; }
td.p { min-width: 6.5rem; white-space: nowrap; }
.bar { display: inline-block; height: .55rem; background: var(--stated); margin-right: .4rem; }
tr.departs .bar { background: var(--alarm); }
tr.departs td { background: color-mix(in srgb, var(--alarm) 9%, transparent); }
dl { display: grid; grid-template-columns: max-content minmax(0, 1fr); gap: .2rem 1.2rem; font: .85rem/1.5 SANS; }
dt { color: var(--soft); } dd { margin: 0; font-variant-numeric: tabular-nums; }
footer { margin-top: 2.6rem; border-top: 3px solid var(--ink); padding-top: 1rem; color: var(--soft); }
@media (max-width: 820px) { .figures { grid-template-columns: minmax(0, 1fr); } }
@media (max-width: 600px) {
  body { padding: 1.2rem .8rem 3rem; } h1 { font-size: 1.5rem; } figure { padding: .7rem .6rem; }
  pre { white-space: pre; overflow-x: auto; font-size: 12px; }
  dl { grid-template-columns: minmax(0, 1fr); } dd { margin-bottom: .4rem; }
  .checks thead { display: none; } .checks, .checks tbody { display: block; }
  .checks tr { display: flex; flex-wrap: wrap; gap: .05rem .8rem; padding: .5rem .6rem;
    border-bottom: 1px solid var(--line); }
  .checks tr td:nth-child(n) { border: 0; padding: 0; min-width: 0; text-align: left; background: none; }
  .checks tr.departs { background: color-mix(in srgb, var(--alarm) 9%, transparent); }
  .checks td:first-child { font-weight: 600; flex-basis: 100%; overflow-wrap: anywhere; }
  .checks td.note { flex-basis: 100%; }
  .checks td:empty { display: none; }
  .checks td:nth-child(4)::before { content: "theory "; } .checks td:nth-child(5)::before { content: "estimate "; }
  .checks td:nth-child(6)::before { content: "std. error "; } .checks td:nth-child(7)::before { content: "p "; }
  .checks td:nth-child(8)::before { content: "smallest found "; }
}
@media print {
  @page { margin: 14mm; }
  body { max-width: none; padding: 0; background: #fff; font-size: 10.5pt; }
  section { margin-top: 1.2rem; } h2, h3, .verdict, section > p, section > .found { break-after: avoid; }
  .series + .series, #checks { break-before: page; }
  .figures { gap: .6rem; grid-template-columns: repeat(2, minmax(0, 1fr)); } figure { padding: .5rem; }
  figcaption { font-size: 8.5pt; } nav, figure details:not([open]) { display: none; }
  .scroll { overflow: visible; border: 0; } table { font-size: 7.5pt; }
  .checks td:nth-child(2), .checks td:nth-child(3) { min-width: 0; }
  td.note { min-width: 34mm; overflow-wrap: break-word; }
  th, td { padding: .15rem .3rem; } thead { display: table-header-group; } tr, li, pre { break-inside: avoid; }
}
"""

PAGE = variables(":root") + FIGURE + _PAGE.replace("SANS", SANS).replace("SERIF", SERIF)
