"""The page's style sheet and its one script: reading values off a diagram. Both are ours and hold no data."""

from __future__ import annotations

from typing import Final

CSS: Final = """
:root{color-scheme:light dark;--paper:#fbfaf7;--ink:#1d2126;--soft:#5b636b;--rule:#dcd8cf;
--measured:#0b6e8f;--law:#b4540a;--second:#5b636b;--third:#8a8f94;--drag:#a8326f;--serious:#a3231c;--warning:#8a5a00;
--info:#0b6e8f}
@media (prefers-color-scheme:dark){:root{--paper:#15181c;--ink:#e7e4dd;--soft:#a0a8b0;--rule:#373d44;
--measured:#5cc8e6;--law:#f0a35a;--second:#a0a8b0;--third:#7d868e;--drag:#f27eb3;--serious:#ff8f85;--warning:#f2c14e;
--info:#5cc8e6}}
*{box-sizing:border-box}
html{-webkit-text-size-adjust:100%}
body{margin:0;background:var(--paper);color:var(--ink);font:1rem/1.55 system-ui,-apple-system,"Segoe UI",Roboto,
"Noto Sans","DejaVu Sans",sans-serif;font-variant-numeric:tabular-nums}
main,header,footer{max-width:70rem;margin:0 auto;padding:0 1.25rem}
header{padding-top:3rem;padding-bottom:1.5rem}
h1,h2{font-family:"Iowan Old Style","Palatino Linotype",Palatino,"URW Palladio L","Noto Serif","DejaVu Serif",Georgia,
serif;font-weight:600;line-height:1.2;margin:0;overflow-wrap:anywhere}
h1{font-size:2.5rem;letter-spacing:-.01em}
h2{font-size:1.25rem}
header p{margin:.4rem 0 0;color:var(--soft);overflow-wrap:anywhere}
section{border-top:1px solid var(--rule);padding:1.75rem 0 2rem;display:grid;grid-template-columns:11rem minmax(0,1fr);
gap:0 2.5rem}
section>h2{grid-column:1}
section>div{grid-column:2;min-width:0}
section>div>:first-child{margin-top:0}
p{margin:.6rem 0;max-width:46rem}
a{color:inherit}
.note,.readout,caption,.legend{color:var(--soft);font-size:.875rem}
.readout{min-height:1.4em;margin:.1rem 0 0}
.readout:empty::before{content:"Point at the curve, or use the arrow keys, to read it off."}
ul.notices{list-style:none;margin:0;padding:0}
.notices li{border-left:4px solid var(--info);padding:.1rem 0 .1rem .9rem;margin:0 0 1rem;max-width:48rem}
.notices li.warning{border-color:var(--warning)}
.notices li.serious{border-color:var(--serious)}
.notices b{margin-right:.35em}
.notices .serious b{color:var(--serious)}
.notices .warning b{color:var(--warning)}
.notices .where{color:var(--soft)}
.notices .hint{display:block;color:var(--soft)}
dl.keys{display:grid;grid-template-columns:repeat(auto-fill,minmax(13rem,1fr));gap:1.5rem 2rem;margin:0}
.keys div{border-top:2px solid var(--ink);padding-top:.5rem}
.keys dt{color:var(--soft);font-size:.875rem;line-height:1.35}
.keys dd{margin:0}
.keys .value{font-size:1.9rem;line-height:1.3;letter-spacing:-.01em}
.keys .value small{font-size:1rem;color:var(--soft);letter-spacing:0}
.scroll{overflow-x:auto;margin:.75rem 0 1.25rem}
table{border-collapse:collapse;font-size:.9375rem;min-width:min(100%,30rem)}
caption{text-align:left;padding-bottom:.4rem}
th,td{text-align:left;padding:.35rem 1.4rem .35rem 0;border-bottom:1px solid var(--rule);vertical-align:top}
thead th{border-bottom:1.5px solid var(--ink);font-weight:600;vertical-align:bottom}
th.n,td.n{text-align:right}
td.n,.nw{white-space:nowrap}
td.w{min-width:11rem}
th{max-width:9rem}
td{overflow-wrap:break-word;max-width:24rem}
tr:last-child td{border-bottom:0}
code{font-size:.875em;overflow-wrap:anywhere}
figure{margin:0 0 2rem}
figure img{display:block;width:100%;height:auto;border-radius:3px}
figure.still{margin:1.25rem 0 2rem -13.5rem}
figcaption{font-weight:600;margin-bottom:.25rem}
figure.still figcaption{font-weight:400;color:var(--soft);font-size:.875rem;margin:.5rem 0 0}
.legend{display:flex;flex-wrap:wrap;gap:.1rem 1.25rem;margin-bottom:.25rem}
.key{display:inline-block;width:1.9em;border-top:3px solid;margin-right:.5em;vertical-align:.25em}
.key.measured,.curve.measured,.band.measured{color:var(--measured)}
.key.ends,.curve.ends,.band.ends{color:var(--measured)}
.key.ends{border-top:2px dotted}
.key.law{color:var(--law);border-top:2px dashed}
.key.total{color:var(--law)}
.key.second{color:var(--second);border-top:2px dotted}
.key.third{color:var(--third);border-top:2px dashed}
.key.drag{color:var(--drag);border-top:3px double}
.key.dots{width:0;border:.24em solid var(--ink);border-radius:50%;opacity:.6;vertical-align:.1em}
.key.zero{border-top:.7em solid var(--measured);opacity:.3;vertical-align:0}
svg{display:block;width:100%;height:auto;touch-action:pan-y}
svg:focus-visible,.scroll:focus-visible{outline:2px solid var(--measured);outline-offset:3px}
svg.narrow{display:none}
svg text{fill:var(--soft);font-size:13px}
svg .label{fill:var(--ink)}
svg .small{font-size:12px}
svg .mid{text-anchor:middle}
svg .end{text-anchor:end}
svg .grid{stroke:var(--rule)}
svg .zero{stroke:var(--soft)}
svg .split{stroke:var(--soft);stroke-dasharray:1 3}
svg .pointer{stroke:var(--ink);visibility:hidden}
.curve{fill:none;stroke:currentColor;stroke-width:2;stroke-linejoin:round}
.curve.measured{stroke-width:3}
.curve.ends{stroke-dasharray:2 3}
.curve.law{color:var(--law);stroke-dasharray:7 3}
.curve.total{color:var(--law);stroke-width:2.5}
.curve.second{color:var(--second);stroke-dasharray:2 3}
.curve.third{color:var(--third);stroke-dasharray:9 3 2 3}
.curve.drag{color:var(--drag);stroke-dasharray:12 3 3 3}
.curve.zero{color:var(--measured);stroke-width:1}
.band{fill:currentColor;stroke:none;opacity:.17}
.band.zero{color:var(--measured)}
.dots{stroke:var(--ink);stroke-width:3.4;stroke-linecap:round;opacity:.55}
footer{padding-bottom:3rem;color:var(--soft);font-size:.875rem}
@media (max-width:52rem){section{display:block}figure.still{margin-left:0}
section>h2{margin-bottom:1rem}h1{font-size:2rem}header{padding-top:2rem}}
@media (max-width:36rem){svg.narrow{display:block}svg.wide{display:none}th,td{padding-right:.9rem}
.keys{gap:1.1rem 2rem}}
@media print{@page{size:A4;margin:16mm 15mm}figure.still{margin-left:0}
:root{color-scheme:light;--paper:#fff;--ink:#000;--soft:#444;--rule:#bbb;--measured:#0b6e8f;--law:#a34c08;
--second:#444;--third:#777;--drag:#962c63;--serious:#8f1d17;--warning:#6d4700;--info:#0b6e8f}
html{font-size:9.5pt}main,header,footer{max-width:none;padding-left:0;padding-right:0}header{padding-top:0}
section{display:block;padding:1rem 0}section>h2{margin-bottom:.6rem;break-after:avoid}
figure,tr,.notices li,.keys div{break-inside:avoid}.scroll{overflow:visible}
.readout{display:none}svg.narrow{display:none!important}svg.wide{display:block!important}svg.wide{max-width:165mm}
dl.keys{grid-template-columns:repeat(3,1fr)}
table{font-size:8.5pt;min-width:0}th,td{padding:.2rem .9rem .2rem 0}td.w{min-width:0}}
"""

SCRIPT: Final = """
for (const chart of document.querySelectorAll('.chart')) {
  const data = JSON.parse(chart.querySelector('script').textContent);
  const out = chart.querySelector('.readout');
  const places = v => Math.abs(v) >= 100 ? 0 : Math.abs(v) >= 20 ? 1 : 2;
  const text = v => v.toFixed(places(v)).replace('-', '\\u2212');
  const unit = label => label.split(', ').pop();
  const at = (s, x, of) => {
    const n = s.x.length;
    if (x < s.x[0] || x > s.x[n - 1]) return null;
    let a = 0, b = n - 1;
    while (b - a > 1) { const m = (a + b) >> 1; if (s.x[m] <= x) a = m; else b = m; }
    const w = s.x[b] > s.x[a] ? (x - s.x[a]) / (s.x[b] - s.x[a]) : 0;
    return of[a] + w * (of[b] - of[a]);
  };
  const show = (svg, x) => {
    const said = [];
    for (const s of data.series) {
      const y = at(s, x, s.y);
      if (y === null) continue;
      const range = s.low ? ' (' + text(at(s, x, s.low)) + ' to ' + text(at(s, x, s.high)) + ')' : '';
      said.push(s.label + ': ' + text(y) + range + ' ' + unit(data.y));
    }
    out.textContent = [text(x) + ' ' + unit(data.x), ...said].join('  \\u00b7  ');
  };
  for (const svg of chart.querySelectorAll('svg')) {
    const d = svg.dataset, left = +d.left, right = +d.right, low = +d.low, high = +d.high;
    const line = svg.querySelector('.pointer');
    let here = (left + right) / 2;
    const go = px => {
      here = Math.min(right, Math.max(left, px));
      line.setAttribute('x1', here); line.setAttribute('x2', here);
      line.style.visibility = 'visible';
      show(svg, low + (here - left) / (right - left) * (high - low));
    };
    const away = () => { line.style.visibility = 'hidden'; out.textContent = ''; };
    svg.addEventListener('pointermove', e => {
      const box = svg.getBoundingClientRect();
      go((e.clientX - box.left) * svg.viewBox.baseVal.width / box.width);
    });
    svg.addEventListener('pointerleave', away);
    svg.addEventListener('blur', away);
    svg.addEventListener('keydown', e => {
      const step = { ArrowLeft: -1, ArrowRight: 1 }[e.key];
      if (step) { e.preventDefault(); go(here + step * (e.shiftKey ? 20 : 4)); }
      if (e.key === 'Escape') away();
    });
  }
}
"""
