"""How the pages look: one sheet of style, readable on a wide screen, a narrow one and paper."""

STYLE = """
:root { color-scheme: light; --ink: #16222b; --soft: #4a5860; --line: #ccd6d9; --edge: #6b7a82; --ground: #f3f6f6;
  --accent: #0a5c66; --alert: #8f1d14; }
* { box-sizing: border-box; }
[hidden] { display: none !important; }
body { font: 16px/1.5 system-ui, sans-serif; color: var(--ink); background: #fff; margin: 0 auto; padding: 0 1rem 1rem;
  max-width: 90rem; }
header { border-bottom: 3px solid var(--accent); padding: 1rem 0 .6rem; margin-bottom: 1rem; }
h1 { font-size: 1.7rem; line-height: 1.2; margin: .2rem 0; overflow-wrap: anywhere; }
h2 { font-size: 1.25rem; margin: 2rem 0 .6rem; color: var(--accent); }
h3 { font-size: 1rem; margin: 0 0 .4rem; }
a { color: var(--accent); }
nav { display: flex; flex-wrap: wrap; gap: .2rem 1rem; font-size: .9rem; }
:focus-visible { outline: 3px solid #d55e00; outline-offset: 2px; }
p, li, dd { max-width: 75ch; overflow-wrap: anywhere; }
.small { font-size: .85rem; color: var(--soft); margin: .3rem 0; }
.tiles { display: flex; flex-wrap: wrap; gap: .6rem; padding: 0; margin: .6rem 0; list-style: none; }
.tiles li { background: var(--ground); border-left: 4px solid var(--accent); padding: .4rem .9rem; min-width: 8rem; }
.tiles li.bad { border-color: var(--alert); background: #fdf3f1; }
.tiles b { display: block; font-size: 1.35rem; line-height: 1.25; font-variant-numeric: tabular-nums; }
.tiles span { font-size: .85rem; color: var(--soft); }
.wide { overflow-x: auto; }
table { border-collapse: collapse; font-size: .875rem; width: 100%; }
th, td { text-align: left; vertical-align: top; padding: .35rem .5rem; border-bottom: 1px solid var(--line); }
thead th { background: var(--ground); vertical-align: bottom; }
th { overflow-wrap: break-word; max-width: 9rem; }
td { overflow-wrap: break-word; max-width: 22rem; }
td.long { overflow-wrap: anywhere; min-width: 8.5rem; }
td.number, th.number { text-align: right; font-variant-numeric: tabular-nums; }
table.sortable td.number:has(br) { min-width: 8.5rem; }
th button { font: inherit; font-weight: 600; color: var(--accent); background: none; border: 0; padding: 0;
  text-align: inherit; cursor: pointer; text-decoration: underline dotted; }
th[aria-sort=ascending] button::after { content: " ▲"; }
th[aria-sort=descending] button::after { content: " ▼"; }
img { max-width: 100%; height: auto; }
img.small { width: 8rem; max-width: 40vw; display: block; margin: 0; }
dt { font-weight: 600; }
dd { margin: 0 0 .4rem 0; }
.alert { border-left: .4rem solid var(--alert); background: #fdf3f1; padding: .4rem 1rem; }
.alert h2 { margin-top: .5rem; color: var(--alert); }
.charts { display: grid; grid-template-columns: repeat(auto-fill, minmax(min(100%, 26rem), 1fr)); gap: 1rem; }
.charts svg { width: 100%; max-width: 32rem; height: auto; display: block; }
footer { margin-top: 2.5rem; border-top: 1px solid var(--edge); padding-top: .5rem; font-size: .85rem; }
button, select, input { font: inherit; color: inherit; }
.tools button, .tools select, .tools input[type=search], aside button, #edit-list button, #rows button {
  border: 1px solid var(--edge); border-radius: .3rem; background: #fff; padding: .25rem .6rem; min-height: 2rem; }
.tools button:hover:enabled, aside button:hover:enabled { background: var(--ground); }
button:enabled { cursor: pointer; }
button:disabled { color: #616b71; border-style: dashed; }
button[aria-pressed=true] { background: var(--accent); color: #fff; border-color: var(--accent); }
button[aria-pressed=true]:hover:enabled { background: #07444c; }
button.main:enabled { background: var(--accent); color: #fff; }
.tools { display: flex; flex-wrap: wrap; gap: .5rem 1rem; align-items: center; margin: .6rem 0; }
.tools span { display: inline-flex; gap: .3rem; }
.tools input[type=search] { width: 14rem; max-width: 100%; }
.tools label { max-width: 100%; }
.tools label > * { margin-left: .3rem; }
.tools label > [type=checkbox] { margin: 0 .2rem 0 0; }
.tools select { max-width: 100%; }
header p { margin: .2rem 0; }
details { margin: .6rem 0; }
summary { cursor: pointer; color: var(--accent); font-weight: 600; padding: .2rem 0; }
summary h2 { display: inline; }
.explore { display: grid; grid-template-columns: minmax(0, 1fr) 21rem; gap: 1.2rem; align-items: start; }
#view { position: relative; background: #000; margin: 0 auto; overflow: hidden; }
#scale { position: absolute; right: .6rem; bottom: .5rem; color: #fff; background: rgba(0, 0, 0, .65);
  padding: .15rem .5rem .3rem; font-size: .85rem; text-align: center; pointer-events: none; }
#scale-bar { height: 3px; background: #fff; margin: .1rem auto 0; }
#tip { position: absolute; z-index: 5; pointer-events: none; background: rgba(255, 255, 255, .96); padding: .4rem .6rem;
  border: 1px solid var(--edge); border-radius: .3rem; font-size: .82rem; line-height: 1.35; max-width: 20rem; }
#tip span, #tip strong { display: block; }
.ramp { height: .9rem; border: 1px solid var(--edge); margin-top: .2rem; }
.ends { display: flex; justify-content: space-between; font-size: .85rem; font-variant-numeric: tabular-nums; }
.swatch { display: flex; gap: .4rem; align-items: center; font-size: .85rem; }
.swatch i { width: 1rem; height: 1rem; border: 1px solid var(--edge); flex: none; }
aside > div { border-top: 1px solid var(--line); padding: .7rem 0; }
aside > div:first-child { border: 0; padding-top: 0; }
aside dl { display: grid; grid-template-columns: 8.2rem 1fr; gap: .15rem .6rem; margin: 0; font-size: .875rem; }
aside dt { font-weight: 400; color: var(--soft); }
aside dd { margin: 0; overflow-wrap: anywhere; }
aside .tools { gap: .35rem; margin: .35rem 0; }
#edit-list { padding-left: 1.2rem; font-size: .875rem; margin: .4rem 0; }
#edit-list button { padding: 0 .4rem; min-height: 1.6rem; }
#table-box { max-height: 27rem; overflow: auto; border: 1px solid var(--line); position: relative; }
#table-box thead th { position: sticky; top: 0; z-index: 2; }
#rows tr { cursor: pointer; }
#rows tr:hover { background: var(--ground); }
#rows button { min-width: 3rem; }
#rows tr.chosen { background: #d8ecee; box-shadow: inset 4px 0 0 var(--accent); }
#rows tr.dropped td { text-decoration: line-through; color: var(--soft); }
@media (max-width: 60rem) { .explore { grid-template-columns: minmax(0, 1fr); } }
@media (max-width: 48rem) {
  table.cards thead { display: none; }
  table.cards, table.cards tbody, table.cards tr, table.cards td { display: block; max-width: none; }
  table.cards tr[hidden] { display: none; }
  table.cards tr { border: 1px solid var(--edge); margin-bottom: .8rem; }
  table.cards td.number { text-align: left; }
  table.cards td[data-name]::before { content: attr(data-name) ": "; font-weight: 600; }
  table.cards td:empty { display: none; }
  table.cards td br { display: none; }
  #table-box table { min-width: 60rem; }
}
@media print { body { max-width: none; } .tools, nav { display: none; } }
"""
