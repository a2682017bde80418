"""The look of the page: one style sheet, fonts of the reader's own system, light and dark."""

STYLE = """
:root {
  --paper: #fbfaf7; --card: #ffffff; --ink: #1d2529; --soft: #5d686d; --rule: #dcdad3;
  --road: #1f6f78; --band: #a9cfd1; --sure: #e7b35a; --warn: #fdf3dc; --warn-edge: #d89b2b;
}
@media (prefers-color-scheme: dark) {
  :root {
    --paper: #14191b; --card: #1b2224; --ink: #e6eaea; --soft: #9aa7aa; --rule: #313b3e;
    --road: #7fd0d4; --band: #2f6468; --sure: #b98632; --warn: #2b2619; --warn-edge: #b98632;
  }
}
* { box-sizing: border-box; }
body {
  margin: 0; background: var(--paper); color: var(--ink);
  font: 16px/1.55 system-ui, -apple-system, "Segoe UI", "Noto Sans", sans-serif;
}
main { max-width: 62rem; margin: 0 auto; padding: 2.5rem 1.25rem 4rem; }
h1 { font-size: 2rem; line-height: 1.15; margin: 0 0 .35rem; letter-spacing: -.01em; text-wrap: balance; }
h2 { font-size: 1.3rem; margin: 3rem 0 .5rem; }
a { color: var(--road); }
.pair {
  display: grid; gap: 0 1.25rem; align-items: start;
  grid-template-columns: repeat(auto-fit, minmax(20rem, 1fr));
}
h3 { font-size: 1rem; margin: 1.5rem 0 .4rem; color: var(--soft); font-weight: 600; }
p { margin: .5rem 0; max-width: 44rem; }
.lead, .note { color: var(--soft); }
.note { font-size: .88rem; }
.figures {
  display: grid; grid-template-columns: repeat(auto-fit, minmax(9rem, 1fr)); gap: .75rem;
  margin: 1.75rem 0; padding: 0;
}
.figures div {
  background: var(--card); border: 1px solid var(--rule); border-radius: 6px; padding: .7rem .9rem;
}
.figures dt { color: var(--soft); font-size: .82rem; }
.figures dd { margin: 0; font-size: 1.45rem; font-variant-numeric: tabular-nums; }
.caution {
  background: var(--warn); border-left: 4px solid var(--warn-edge); padding: .7rem 1.1rem;
  border-radius: 0 6px 6px 0;
}
.caution ul { margin: .3rem 0; padding-left: 1.1rem; }
.chart, .scroll {
  background: var(--card); border: 1px solid var(--rule); border-radius: 6px; padding: .8rem;
  overflow-x: auto;
}
svg { display: block; width: 100%; min-width: 36rem; height: auto; }
table { border-collapse: collapse; width: 100%; font-size: .86rem; font-variant-numeric: tabular-nums; }
th {
  color: var(--soft); font-weight: 600; text-align: right; vertical-align: bottom;
  border-bottom: 1px solid var(--rule);
}
td { text-align: right; border-bottom: 1px solid var(--rule); white-space: nowrap; }
th, td { padding: .32rem .5rem; }
th.text, td.text { text-align: left; }
td small { color: var(--soft); display: block; font-size: .76rem; }
tr:last-child td { border-bottom: 0; }
dl.origin { display: grid; grid-template-columns: max-content 1fr; gap: .2rem 1.2rem; font-size: .88rem; }
dl.origin dt { color: var(--soft); }
dl.origin dd { margin: 0; overflow-wrap: anywhere; }
.tick, .count { fill: var(--soft); font-size: 11px; }
.label { fill: var(--ink); font-size: 13px; }
.grid { stroke: var(--rule); stroke-width: 1; }
.zero { stroke: var(--soft); stroke-width: 1; }
.reach { stroke: var(--road); stroke-width: 1.5; }
.most { fill: var(--band); }
.sure { fill: var(--sure); opacity: .75; }
.middle { stroke: var(--road); stroke-width: 2.5; }
.key {
  display: flex; flex-wrap: wrap; gap: .3rem 1.4rem; font-size: .84rem; color: var(--soft);
  margin: .5rem 0; padding: 0; list-style: none;
}
.key svg {
  display: inline-block; width: 2.2rem; min-width: 0; height: 1rem; vertical-align: -.15rem;
  margin-right: .35rem;
}
@media print { body { background: #fff; } .chart, .scroll, .figures div { break-inside: avoid; } }
"""
