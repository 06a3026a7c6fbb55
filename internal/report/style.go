package report

// stylesheet holds all the looks of a page. Ink on paper by day and on paper in
// print, the dark variant by the reader's system setting; text keeps a contrast
// of at least 4.5 to 1 in both, lines 3 to 1.
const stylesheet = `:root{color-scheme:light dark;
--paper:#fbfaf7;--ink:#1b1b1b;--soft:#55534e;--rule:#d9d6ce;--faint:#a9a69d;--truth:#85827a;--alarm:#a3210c;--link:#0b4f8a;--band:#f1efe8;--edge:#1b1b1b;
--k1:#0072b2;--k2:#d55e00;--k3:#009e73;--k4:#cc79a7;--k5:#e69f00;--k6:#56b4e9;--k7:#f0e442}
@media screen and (prefers-color-scheme:dark){:root{
--paper:#16171a;--ink:#e9e7e1;--soft:#b1aea6;--rule:#34363b;--faint:#676a71;--truth:#8d9097;--alarm:#ff9b84;--link:#8cc4ff;--band:#1f2125;--edge:#16171a}}
*{box-sizing:border-box}
html{background:var(--paper);color:var(--ink);-webkit-text-size-adjust:100%}
body{margin:0;font:16px/1.5 "Gill Sans","Gill Sans Nova",Optima,Candara,"Noto Sans","Liberation Sans",Arial,sans-serif}
main{max-width:892px;margin:0 auto;padding:24px 16px 48px}
h1,h2{font-family:"Iowan Old Style","Palatino Linotype",Palatino,"Book Antiqua","Liberation Serif",Georgia,serif;font-weight:600;line-height:1.25}
h1{font-size:29px;margin:6px 0 14px;max-width:34em;overflow-wrap:anywhere}
h2{font-size:21px;margin:40px 0 12px;padding-bottom:4px;border-bottom:1px solid var(--ink)}
p,li,dd{overflow-wrap:anywhere}
p{margin:0 0 10px;max-width:46em}
a{color:var(--link)}
a:focus-visible,[tabindex]:focus-visible{outline:3px solid var(--link);outline-offset:2px}
.over{color:var(--soft);font-size:15px;margin:0}
.over b{color:var(--ink)}
.cautions{list-style:none;margin:0 0 14px;padding:2px 0 2px 14px;border-left:3px solid var(--alarm);max-width:48em}
.cautions li{margin:4px 0}
.safety{color:var(--soft);font-size:14px}
nav ul{list-style:none;display:flex;flex-wrap:wrap;gap:4px 20px;margin:16px 0 0;padding:0;font-size:15px}
.attention{margin:0;padding-left:1.6em;max-width:46em}
.attention li{margin:5px 0;padding-left:4px}
.attention li::marker{font-weight:700}
figure{margin:0 0 24px}
figcaption{font-weight:600;margin:18px 0 8px}
.aloud{position:absolute;width:1px;height:1px;margin:0;overflow:hidden;clip-path:inset(50%)}
.store{position:absolute}
svg{display:block;max-width:100%;height:auto}
svg svg{overflow:hidden}
.phone{display:none}
.plan>svg{margin:0 auto}
.island figcaption{font-weight:400;font-size:14px}
.islands,.multiples{display:grid;grid-template-columns:repeat(auto-fill,minmax(min(100%,400px),1fr));gap:22px 28px}
.key{list-style:none;display:flex;flex-wrap:wrap;gap:4px 22px;margin:10px 0 12px;padding:0;font-size:14px}
.key li{display:flex;align-items:center;gap:8px}
.key svg{flex:none;overflow:visible}
.titleblock{display:grid;grid-template-columns:1.3fr .8fr 1.5fr 1.1fr;margin:14px 3px 3px;border:1px solid var(--ink);outline:1px solid var(--ink);outline-offset:2px}
.titleblock div{padding:5px 10px 6px;border-left:1px solid var(--faint)}
.titleblock .wide{grid-column:1/-1;border-left:0;border-bottom:1px solid var(--faint)}
.titleblock .wide+div{border-left:0}
.titleblock dt{font-size:12px;color:var(--soft);letter-spacing:.04em}
.titleblock dd{margin:0;font-size:15px}
.titleblock .wide dd{font-size:19px;font-family:"Iowan Old Style","Palatino Linotype",Palatino,"Book Antiqua","Liberation Serif",Georgia,serif}
.empty{padding:20px;border:1px solid var(--faint)}
.scroll{overflow-x:auto;margin:18px 0 4px}
table{border-collapse:collapse;font-size:15px;min-width:60%}
caption{text-align:left;font-weight:600;padding:0 0 6px}
th,td{padding:4px 14px 4px 0;text-align:left;vertical-align:top;font-weight:400}
th:last-child,td:last-child{padding-right:4px}
thead th{border-top:1px solid var(--ink);border-bottom:1px solid var(--ink);vertical-align:bottom;font-size:14px}
tbody tr:last-child>*{border-bottom:1px solid var(--ink)}
tbody tr+tr>*{border-top:1px solid var(--rule)}
.r{text-align:right;font-variant-numeric:tabular-nums lining-nums}
.unit{display:block;color:var(--soft)}
sup{font-size:11px;line-height:1;margin-left:1px}
.note{font-size:14px;color:var(--soft);margin:6px 0 0;padding:0;list-style:none}
.files{margin:0}
.files dd{margin:0 0 8px}
code{font-family:"Liberation Mono",Consolas,monospace;font-size:14px}
svg text{font-size:12px;fill:var(--ink)}
svg .soft{fill:var(--soft)}
svg .small{font-size:11px}
svg .b{font-weight:600}
svg .i{font-style:italic}
svg .halo{paint-order:stroke;stroke:var(--paper);stroke-width:3.2px;stroke-linejoin:round}
.frame,.ink,.bar,.mark,.cross,.back,.diamond,.tie,.fine,.hair,.grid,.rule,.limit,.truth,.line,.under,.ellipse{fill:none;stroke:var(--ink)}
.frame{stroke-width:1.4px}
.ink{stroke-width:1.2px}
.bar{stroke-width:1px}
.fill{fill:var(--ink)}
.fine{stroke-width:.9px}
.hair{stroke:var(--soft);stroke-width:.7px}
.grid{stroke:var(--faint);stroke-width:.8px}
.rule{stroke:var(--rule);stroke-width:1px}
.limit{stroke:var(--alarm);stroke-width:1.2px;stroke-dasharray:7 4}
.truth{stroke:var(--truth);stroke-width:.8px}
.line{stroke-linejoin:round}
.edge{stroke:var(--edge)}
.plate{fill:var(--paper);fill-opacity:.8}
.under{stroke:var(--paper);stroke-width:3.6px}
.end{fill:var(--ink);stroke:var(--paper);stroke-width:.9px}
.tie{stroke-width:1}
.no{stroke:var(--alarm);stroke-dasharray:5 3.5}
.may{stroke-dasharray:.1 3.4;stroke-linecap:round;stroke-width:1.6}
.mark{fill:var(--paper);stroke-width:1.3px}
.cross{stroke:var(--alarm);stroke-width:2px}
.back{stroke:var(--paper);stroke-width:5px}
.diamond{stroke-width:1.3px}
.ellipse{stroke-width:1px;fill:var(--ink);fill-opacity:.07}
.k0{stroke:var(--ink)}.k1{stroke:var(--k1)}.k2{stroke:var(--k2)}.k3{stroke:var(--k3)}.k4{stroke:var(--k4)}.k5{stroke:var(--k5)}.k6{stroke:var(--k6)}.k7{stroke:var(--k7)}
circle.dot{fill:var(--paper);stroke-width:2px}
@media screen and (max-width:640px){
main{padding:16px 16px 40px}
h1{font-size:23px}
.desk{display:none}.phone{display:block}
.titleblock{grid-template-columns:1fr 1fr}
.titleblock div:nth-child(even){border-left:0}
.titleblock div:nth-child(n+4){border-top:1px solid var(--faint)}
nav a{display:inline-block;padding:6px 0}
td:not(.r){min-width:9em}
}
@media print{
@page{size:A4;margin:14mm 15mm}
:root{--paper:#fff;color-scheme:light}
main{padding:0;max-width:none}
body{font-size:10.5pt}
nav{display:none}
h1{font-size:19pt}h2{font-size:14pt;break-after:avoid;margin-top:20pt}
figcaption,caption{break-after:avoid}
figure.plan,figure.island,svg,tr,.cautions,.titleblock{break-inside:avoid}
.multiples{grid-template-columns:1fr 1fr;gap:12pt 16pt}
.islands{grid-template-columns:1fr 1fr}
.scroll{overflow:visible}
table{width:100%;font-size:9pt}
th,td{padding-right:8px;overflow-wrap:anywhere}
.note,.key,.safety{font-size:9pt}
a{color:inherit;text-decoration:none}
}
`
