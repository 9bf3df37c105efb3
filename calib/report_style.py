"""How the report looks: one column on a phone, two on a desk, black on white on paper."""

from __future__ import annotations

STYLE = """
:root { color-scheme: light; }
* { box-sizing: border-box; }
body { margin: 0; background: #f4f4f2; color: #222; font: 16px/1.5 system-ui, sans-serif; }
main { max-width: 1060px; margin: 0 auto; padding: 16px; }
h1 { font-size: 1.35rem; margin: 0; } h2 { font-size: 1.2rem; margin: 0 0 .6rem; }
header { margin: 4px 4px 14px; } .facts { margin: 0; color: #555; font-size: .9rem; overflow-wrap: anywhere; }
section { background: #fff; border: 1px solid #d8d8d4; border-radius: 8px; padding: 16px 18px; margin: 0 0 14px; }
#verdict { border-width: 3px; border-left-width: 14px; }
#verdict h2 { font-size: 1.45rem; }
#verdict.good { border-color: #007a5a; } #verdict.doubtful { border-color: #b36b00; border-style: dashed; }
#verdict.not-usable { border-color: #b3261e; border-style: double; border-width: 6px 6px 6px 16px; }
.mark { display: inline-block; width: 1.5em; height: 1.5em; line-height: 1.4em; text-align: center; border: 2px solid #222;
  border-radius: 50%; margin-right: .2em; }
.answer { font-size: 1.1rem; margin: 0 0 .6rem; }
ul, ol { margin: .2rem 0; padding-left: 1.3rem; } li { margin: .35rem 0; }
.why { color: #444; }
.scroll { overflow-x: auto; margin: 0 0 14px; }
table { border-collapse: collapse; width: 100%; font-variant-numeric: tabular-nums; }
th, td { text-align: left; vertical-align: top; padding: .3rem .7rem .3rem 0; border-bottom: 1px solid #e3e3df; }
thead th { border-bottom: 2px solid #888; font-size: .9rem; }
tbody th { font-weight: normal; color: #444; }
figure { margin: 0 0 12px; } figure svg { display: block; width: 100%; height: auto; }
figcaption { color: #444; font-size: .92rem; margin-top: .3rem; }
.pair { display: grid; grid-template-columns: repeat(auto-fit, minmax(min(100%, 420px), 1fr)); gap: 14px; }
.views { display: grid; grid-template-columns: repeat(auto-fill, minmax(min(100%, 225px), 1fr)); gap: 12px; }
.view { margin: 0; border: 2px solid #d0d0cc; border-radius: 4px; padding: 4px; break-inside: avoid; }
.view.held { border: 2px dashed #d55e00; }
.view figcaption { font-size: .82rem; overflow-wrap: anywhere; }
@media print {
  body { background: #fff; font-size: 11pt; } main { max-width: none; padding: 0; }
  section { border: 0; padding: 0; } #verdict { padding: 8px 12px; }
  figure, tr, li { break-inside: avoid; } h2 { break-after: avoid; } .scroll { overflow: visible; }
  .views { grid-template-columns: repeat(4, 1fr); }
}
"""
