"""The look of the page: light and dark as the reader's system asks, and on paper.

Curves are blue and orange, which readers without red or green vision tell apart; dashes and words say the same.
"""

CSS = """
:root {
  color-scheme: light dark;
  --back: #ffffff; --card: #f4f6f8; --text: #1b1f24; --faint: #57606a; --rule: #c9d1d9;
  --good: #0b5cad; --bad: #a33c00; --s0: #0b5cad; --s1: #b34700; --s2: #5c5c5c; --s3: #7a3b8f;
}
@media (prefers-color-scheme: dark) {
  :root {
    --back: #14181d; --card: #1e242b; --text: #e6eaef; --faint: #a3adb8; --rule: #3d4650;
    --good: #7db8f0; --bad: #ffb066; --s0: #7db8f0; --s1: #ffb066; --s2: #c3c8ce; --s3: #d3a4e3;
  }
}
* { box-sizing: border-box; }
body {
  margin: 0 auto; padding: 1rem clamp(0.8rem, 3vw, 2.5rem) 3rem; max-width: 84rem;
  background: var(--back); color: var(--text); font: 1rem/1.5 system-ui, sans-serif; overflow-wrap: anywhere;
}
h1 { font-size: 1.5rem; line-height: 1.25; margin: 0.5rem 0; }
h2 { font-size: 1.2rem; margin: 2.2rem 0 0.6rem; padding-top: 0.6rem; border-top: 1px solid var(--rule); }
h3 { font-size: 1rem; margin: 1.4rem 0 0.4rem; }
a { color: var(--good); }
:focus-visible { outline: 3px solid var(--good); outline-offset: 2px; }
.skip { position: absolute; left: -60rem; }
.skip:focus { position: static; }
nav ul { display: flex; flex-wrap: wrap; gap: 0.2rem 1.2rem; padding: 0; list-style: none; }
.verdict {
  font-size: 1.25rem; font-weight: 600; padding: 0.7rem 1rem; border-left: 0.5rem solid; background: var(--card);
}
.ok { color: var(--good); }
.exceeded { color: var(--bad); font-weight: 600; }
.faint { color: var(--faint); }
.scroll { overflow-x: auto; max-width: 100%; }
table { border-collapse: collapse; font-variant-numeric: tabular-nums; }
caption { text-align: left; font-weight: 600; padding: 0.9rem 0 0.3rem; }
th, td {
  padding: 0.3rem 0.8rem 0.3rem 0; text-align: right; border-bottom: 1px solid var(--rule); white-space: nowrap;
}
th:first-child, td:first-child {
  text-align: left; font-weight: normal; position: sticky; left: 0; background: var(--back);
}
.block { max-width: 100%; }
.block > p { margin: 0.4rem 0; max-width: 44rem; }
.blocks { display: flex; flex-wrap: wrap; gap: 0 3rem; }
th.part { padding-left: 1.2rem; }
td.long { white-space: normal; overflow-wrap: normal; min-width: 12rem; }
.number { white-space: nowrap; }
.grid { display: grid; grid-template-columns: repeat(auto-fit, minmax(min(100%, 24rem), 1fr)); gap: 1rem; }
figure { margin: 0.6rem 0 0; padding: 0.6rem; background: var(--card); border-radius: 0.3rem; break-inside: avoid; }
figure svg { width: 100%; max-width: 36rem; height: auto; display: block; margin: 0 auto; }
figcaption { font-size: 0.9rem; color: var(--faint); padding-top: 0.4rem; }
svg text { fill: var(--text); font: 12px system-ui, sans-serif; }
svg .axis { fill: none; stroke: var(--faint); }
svg .grid { stroke: var(--rule); stroke-width: 0.5; }
svg .bar { fill: var(--s0); }
svg .s0, svg .s1, svg .s2, svg .s3 { fill: none; stroke-width: 2; }
svg .s0 { stroke: var(--s0); } svg .s1 { stroke: var(--s1); }
svg .s2 { stroke: var(--s2); } svg .s3 { stroke: var(--s3); }
pre {
  background: var(--card); padding: 0.8rem; overflow-x: auto; font-size: 0.85rem; line-height: 1.4;
  overflow-wrap: normal;
}
code { overflow-wrap: anywhere; }
dl { display: grid; grid-template-columns: fit-content(16rem) 1fr; gap: 0.2rem 1rem; margin: 0; }
dt { color: var(--faint); }
dd { margin: 0; }
@media (max-width: 36rem) {
  th, td { padding-right: 0.5rem; font-size: 0.875rem; }
  th:first-child { white-space: normal; min-width: 7rem; }
  dl { grid-template-columns: fit-content(8.5rem) 1fr; }
}
@media print {
  :root {
    color-scheme: light; --back: #ffffff; --card: #ffffff; --text: #000000; --faint: #333333; --rule: #999999;
    --good: #0b4a8a; --bad: #8a3300; --s0: #0b4a8a; --s1: #8a3300; --s2: #444444; --s3: #5f2d70;
  }
  @page { margin: 14mm; }
  html { font-size: 9pt; }
  body { max-width: none; padding: 0; }
  nav, .skip { display: none; }
  .verdict { border: 1pt solid; border-left-width: 0.5rem; }
  .scroll, pre { overflow: visible; }
  .grid { grid-template-columns: repeat(auto-fit, minmax(18rem, 1fr)); }
  th, td { padding: 0.15rem 0.6rem 0.15rem 0; }
  th:first-child, td:first-child { position: static; white-space: normal; overflow-wrap: normal; }
  td.long { min-width: 0; overflow-wrap: anywhere; }
  pre { white-space: pre-wrap; }
  h2, h3, caption { break-after: avoid; }
  tr { break-inside: avoid; }
}
"""
