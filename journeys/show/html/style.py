"""How the page looks: ink on paper, grey lines, one pair of colours, light and dark, on a phone and in print."""

from __future__ import annotations

# Dark blue and orange stay apart for every kind of colour blindness, and differ in lightness.
STYLE = """
:root { --paper: #ffffff; --ink: #1f2328; --grey: #57606a; --line: #d0d4d9; --wash: #f5f6f7;
  --first: #1b4f8a; --second: #b45309; color-scheme: light dark; }
@media screen and (prefers-color-scheme: dark) {
  :root { --paper: #15181c; --ink: #e4e7ea; --grey: #a2abb4; --line: #3b424a; --wash: #1e2227;
    --first: #86b6ee; --second: #f0a04b; }
}
* { box-sizing: border-box; }
html { -webkit-text-size-adjust: 100%; text-size-adjust: 100%; }
body { margin: 0; background: var(--paper); color: var(--ink); overflow-wrap: anywhere;
  font: 1.0625rem/1.55 Charter, "Bitstream Charter", "Sitka Text", Cambria, Georgia, "DejaVu Serif", serif; }
header, main, nav { max-width: 46rem; margin: 0 auto; padding: 0 1rem; }
main { padding-bottom: 4rem; }
h1 { font-size: 1.75rem; line-height: 1.2; margin: 2.5rem 0 1rem; }
h2 { font-size: 1.25rem; line-height: 1.3; margin: 2.75rem 0 0.75rem; padding-top: 0.75rem;
  border-top: 1px solid var(--line); }
p, ul, dl { margin: 0.75rem 0; max-width: 40rem; }
.lead { font-size: 1.1875rem; }
.quiet, figcaption, caption { color: var(--grey); }
a { color: var(--first); text-underline-offset: 0.15em; }
a:focus-visible, .box:focus-visible { outline: 3px solid var(--second); outline-offset: 2px; }
.skip { position: absolute; left: -100vw; background: var(--paper); padding: 0.5rem 1rem; }
.skip:focus { left: 0; top: 0; z-index: 3; }
nav ol { columns: 17rem; column-gap: 2.5rem; padding-left: 1.25rem; margin: 0.5rem 0; font-size: 0.9375rem; }
nav li, ul li { margin: 0.25rem 0; }
ul { padding-left: 1.25rem; }
.box { overflow-x: auto; margin: 1rem 0; }
@media (min-width: 50rem) { .box { width: max-content; max-width: calc(100% + (100vw - 50rem) / 2); } }
@media screen and (min-width: 62rem) {
  :root { --left: max(1rem, (100vw - 72rem) / 2); }
  header, main, nav { margin-left: var(--left); }
  .box { max-width: calc(100vw - var(--left) - 3rem); }
}
table { border-collapse: collapse; font-size: 0.9375rem; line-height: 1.4; overflow-wrap: break-word;
  font-variant-numeric: lining-nums tabular-nums; }
caption, figcaption { text-align: left; font-size: 0.9375rem; font-style: italic; padding-bottom: 0.35rem; }
caption span { display: block; position: sticky; left: 0; width: fit-content; max-width: calc(100vw - 2rem); }
th, td { text-align: left; vertical-align: top; padding: 0.3rem 0.9rem 0.3rem 0; font-weight: normal; }
th:last-child, td:last-child { padding-right: 0; }
thead th { vertical-align: bottom; color: var(--grey); border-bottom: 1.5px solid var(--ink); min-width: 4.5rem;
  max-width: 11rem; }
tbody th, tbody td { border-bottom: 1px solid var(--line); }
tbody th { background: var(--paper); max-width: 14rem; }
.number { text-align: right; white-space: nowrap; }
.whole { white-space: nowrap; }
thead .number { white-space: normal; }
.words { min-width: 11rem; max-width: 26rem; }
.long { min-width: 8.5rem; }
.interval { color: var(--grey); }
.below .interval { display: block; font-size: 0.8125rem; }
figure { margin: 1.25rem 0; max-width: 34rem; }
svg { display: block; width: 100%; height: auto; overflow: visible; }
svg text { font: 11px ui-sans-serif, system-ui, "Segoe UI", Helvetica, Arial, "DejaVu Sans", sans-serif;
  fill: var(--ink); font-variant-numeric: tabular-nums; }
svg .faint { fill: var(--grey); font-size: 10px; }
svg .none { fill: var(--grey); font-style: italic; font-size: 10px; }
svg .axis { stroke: var(--grey); }
svg .rule { stroke: var(--line); }
svg .zero { stroke: var(--ink); }
svg .span { stroke: var(--grey); stroke-width: 2.5; }
svg .dot { fill: var(--first); stroke: var(--first); stroke-width: 1.5; }
svg .hollow { fill: var(--paper); }
svg .band { fill: var(--first); opacity: 0.18; }
svg .curve { fill: none; stroke: var(--first); stroke-width: 2; }
svg .seen { fill: none; stroke: var(--ink); stroke-width: 1; }
svg .half { stroke: var(--ink); stroke-width: 1; stroke-dasharray: 2 2; }
svg .mark { fill: var(--second); }
dt { font-weight: bold; margin-top: 0.6rem; }
dd { margin: 0 0 0 1.25rem; }
code, pre { font: 0.875em/1.5 ui-monospace, "DejaVu Sans Mono", Menlo, Consolas, monospace; }
pre { white-space: pre-wrap; background: var(--wash); padding: 0.75rem 1rem; margin: 1rem 0; }
@media (max-width: 40rem) {
  body { font-size: 1rem; }
  h1 { font-size: 1.5rem; margin-top: 1.5rem; }
  table, caption, figcaption { font-size: 0.875rem; }
  tbody th:first-child { position: sticky; left: 0; max-width: 8.5rem; padding-right: 0.6rem; }
}
@media print {
  @page { margin: 16mm 14mm; }
  body { font-size: 9.5pt; }
  header, main { max-width: none; padding: 0; }
  nav, .skip { display: none; }
  h1 { margin-top: 0; }
  h2 { break-after: avoid; margin-top: 1.5rem; }
  .box { overflow: visible; width: auto; max-width: none; break-inside: avoid; }
  table, caption, figcaption { font-size: 8pt; }
  th, td { padding-right: 0.5rem; }
  thead th { min-width: 0; }
  .number { white-space: normal; }
  .interval { white-space: nowrap; }
  .below table, .below.box table { font-size: 7pt; }
  .below .interval { font-size: 6.5pt; }
  thead { display: table-header-group; }
  tr, figure, dt, li { break-inside: avoid; }
  figure { max-width: 120mm; }
}
"""
