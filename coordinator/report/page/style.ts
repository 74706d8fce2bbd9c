/**
 * The look of all pages: one column of text and figures, a list of contents beside it where there is room. Three inks
 * for marks (common fit, choice and tolerance, average), each with a shape of its own as well.
 */
const COLOURS_LIGHT = `--paper:#fff;--tint:#f1f4f2;--ink:#1a2124;--soft:#55616a;--rule:#cfd6d3;--mark:#0e5f66;--second:#94440c;--third:#5b478f;--sound:#1d5e39;--caution:#8a4b05;--unsound:#9c1c2b`;
const COLOURS_DARK = `--paper:#12181a;--tint:#1b2326;--ink:#e4e8e5;--soft:#a8b3b5;--rule:#39454a;--mark:#74c8c6;--second:#eaa766;--third:#bcabf0;--sound:#8ad3a1;--caution:#eaa766;--unsound:#ff9ba2`;

const SCREEN = `
*{box-sizing:border-box}
html{color-scheme:light dark;scroll-padding-top:1rem;-webkit-text-size-adjust:100%}
body{margin:0;background:var(--paper);color:var(--ink);font:1rem/1.55 ui-sans-serif,system-ui,sans-serif}
.skip{position:absolute;left:-99rem;top:0;background:var(--paper);padding:.6rem 1rem;z-index:2}
.skip:focus{left:0}
:focus-visible{outline:3px solid var(--second);outline-offset:2px}
a{color:var(--mark);text-underline-offset:.18em}
h1,h2,h3,h4{line-height:1.2;text-wrap:balance}
h1,h2,.cite{font-family:ui-serif,Charter,"Bitstream Charter",Georgia,serif;font-weight:600}
h1{font-size:2.1rem;margin:.2rem 0 .5rem}
h2{font-size:1.45rem;margin:0 0 .8rem}
h3{font-size:1.05rem;margin:2rem 0 .5rem}
h4{font-size:.95rem;margin:0 0 .2rem;overflow-wrap:anywhere}
p,ul{margin:0 0 .8rem;max-width:44rem}
ul{padding-left:1.2rem}
li{margin-bottom:.25rem}
code,pre{font:.875em/1.5 ui-monospace,"DejaVu Sans Mono",monospace}
code{overflow-wrap:anywhere}
pre{background:var(--tint);padding:.8rem 1rem;overflow-x:auto;margin:0 0 1rem}
pre code{overflow-wrap:normal}
.page{max-width:78rem;margin:0 auto;padding:0 1.25rem}
header{padding:2rem 0 1.2rem}
.kind,.tone{font-size:.85rem;letter-spacing:.04em;margin:0;color:var(--soft)}
.meta{color:var(--soft);margin:0;max-width:none}
main>section{padding:1.8rem 0;border-top:1px solid var(--rule)}
nav.contents{font-size:.9rem}
nav.contents ol{list-style:none;margin:0 0 1.5rem;padding:0;columns:2;column-gap:1.5rem}
nav.contents li{break-inside:avoid;margin:0}
nav.contents a{display:inline-block;padding:.2rem 0;color:var(--soft)}
nav.contents a:hover{color:var(--ink)}
main>section.verdict{border:0;border-left:.5rem solid var(--tone);background:var(--tint);padding:1.4rem 1.6rem .7rem;margin-bottom:1.8rem}
.verdict .tone{color:var(--tone);font-weight:700}
.verdict h2{font-size:1.75rem;margin:.15rem 0 1.1rem}
.sound{--tone:var(--sound)}.caution{--tone:var(--caution)}.unsound{--tone:var(--unsound)}
.verdict.unsound{border-left-style:double;border-left-width:.9rem}
.verdict.caution{border-left-style:dashed}
dl{margin:0 0 1rem}
dl>div{display:grid;grid-template-columns:minmax(9rem,15rem) 1fr;gap:.2rem 1.5rem;padding:.45rem 0;border-top:1px solid var(--rule)}
dl>div:first-child{border-top:0}
dt{font-weight:600}
dd{margin:0;overflow-wrap:anywhere}
dd p,dd ul{margin-bottom:.4rem}
.wide{overflow-x:auto;margin:0 0 1.2rem}
.long{content-visibility:auto;contain-intrinsic-size:auto 200rem}
table{border-collapse:collapse;font-size:.86rem;font-variant-numeric:tabular-nums}
caption{text-align:left;font-weight:600;padding:0 0 .5rem}
th,td{text-align:left;vertical-align:top;padding:.3rem .8rem .3rem 0;border-bottom:1px solid var(--rule)}
thead th{vertical-align:bottom;border-bottom:2px solid var(--ink);font-weight:600}
tbody th{font-weight:400}
th:last-child,td:last-child{padding-right:.2rem}
.number{text-align:right}
td.number{white-space:nowrap}
figure{margin:0 0 1.4rem}
figcaption,.caption{font-size:.875rem;color:var(--soft);max-width:44rem}
.picture{display:block;max-width:100%;height:auto;color:var(--ink)}
.picture text{white-space:pre;fill:var(--ink)}
.picture text[fill],.picture g[fill^="var"] text{fill:inherit}
figure>.wide{margin-bottom:.3rem}
figure>.wide>.picture{min-width:30rem;max-width:46rem;width:100%}
figure>.wide>.picture[width="460"]{min-width:20rem;max-width:29rem}
.forests{display:grid;grid-template-columns:repeat(auto-fill,minmax(min(100%,24rem),1fr));gap:.6rem 2rem}
.forests figure{break-inside:avoid}
details{margin:0 0 1.2rem}
summary{cursor:pointer;font-size:.9rem;color:var(--mark);padding:.2rem 0}
details[open]>summary{margin-bottom:.5rem}
.cite{font-weight:400;border-left:3px solid var(--rule);padding-left:1rem}
footer{border-top:1px solid var(--rule);padding:1.2rem 0 3rem;color:var(--soft);font-size:.9rem}
[hidden]{display:none!important}
.unseen{position:absolute;width:1px;height:1px;overflow:hidden;clip-path:inset(50%)}
.trace{fill:none;stroke:var(--mark);stroke-width:1.5}.here{fill:var(--mark)}.tolerance{fill:none;stroke:var(--second);stroke-width:2}
form label{display:block;font-weight:600;margin-bottom:.3rem}
input{font:inherit;color:inherit;background:var(--paper);border:1px solid var(--soft);padding:.5rem .6rem;width:100%;max-width:32rem}
button{font:inherit;color:var(--paper);background:var(--mark);border:1px solid var(--mark);padding:.5rem 1.1rem;margin-top:.8rem;display:block;cursor:pointer}
form+.caption{margin-top:1rem}
.problem{color:var(--unsound);font-weight:600}
@media (min-width:48rem){caption,tbody th{white-space:nowrap}}
@media (min-width:64rem){
.columns{display:grid;grid-template-columns:14rem minmax(0,1fr);gap:0 3rem}
nav.contents{position:sticky;top:0;align-self:start;max-height:100vh;overflow-y:auto;padding:1.5rem 0}
nav.contents ol{columns:1}
}
@media (max-width:40rem){
dl>div{grid-template-columns:1fr}
h1{font-size:1.6rem}.verdict h2{font-size:1.4rem}
main>section.verdict{padding:1.1rem 1rem .4rem}
}
@media (prefers-reduced-motion:no-preference){html{scroll-behavior:smooth}}
`;

const PRINT = `
@page{size:A4;margin:18mm 16mm 20mm}
@media print{
html{color-scheme:light;font-size:9.5pt}
body{line-height:1.4}
.page{max-width:none;padding:0}
header{padding-top:0}
nav.contents,.skip,summary,.screen{display:none}
.columns{display:block}
main>section{padding:1rem 0}
h1{font-size:20pt}h2{font-size:14pt}.verdict h2{font-size:16pt}h3{font-size:11pt}
h2,h3,h4,caption{break-after:avoid}
figure,tr,dl>div,pre,.verdict{break-inside:avoid}
thead{display:table-header-group}
.wide{overflow:visible;content-visibility:visible}
table{font-size:7.4pt;width:100%}
th,td{padding:.18rem .5rem .18rem 0}
.dense td.number,caption,tbody th{white-space:normal}
figure>.wide>.picture{min-width:0;max-width:150mm}
figure>.wide>.picture[width="460"]{min-width:0;max-width:86mm}
.forests{display:block;columns:2}
details::details-content{content-visibility:visible;display:block}
a{color:inherit;text-decoration:none}
pre{white-space:pre-wrap;overflow-wrap:anywhere}
.verdict{-webkit-print-color-adjust:exact;print-color-adjust:exact}
}
`;

export const STYLE = `:root{${COLOURS_LIGHT}}
@media screen and (prefers-color-scheme:dark){:root{${COLOURS_DARK}}}
@media screen and (prefers-contrast:more){:root{--soft:var(--ink);--rule:var(--ink)}}
@media (forced-colors:active){.picture{forced-color-adjust:none;background:var(--paper)}}
${SCREEN}${PRINT}`;
