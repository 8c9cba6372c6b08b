"""How the page looks: a quiet page of text and figures, for screens of any width and for paper.

Blue-green, ochre and plum differ in lightness as well as hue, so that no kind of colour blindness merges them.
"""

__all__ = ["CSS"]

CSS = """
:root{--ink:#1f2a30;--soft:#5c666b;--rule:#d9d4c7;--paper:#fcfbf7;--wash:#f3f0e7;
--measured:#0e5a66;--reference:#b8701a;--accent:#7b3f74;--quiet:#a3a8a6}
*{box-sizing:border-box}
html{-webkit-text-size-adjust:100%}
body{margin:0;background:var(--paper);color:var(--ink);font:17px/1.55 Charter,"Bitstream Charter","Iowan Old Style",
"Palatino Linotype",Palatino,Georgia,"Liberation Serif",serif}
main{max-width:61rem;margin:0 auto;padding:2.5rem 1.5rem 4rem}
p,ul,ol{max-width:42rem;margin:.6rem 0}
li{margin:.3rem 0}
h1{font-size:2.1rem;line-height:1.15;font-weight:600;margin:.2rem 0 .4rem;letter-spacing:-.01em;overflow-wrap:anywhere}
h2{font-size:1.35rem;font-weight:600;margin:3.2rem 0 .8rem;padding-top:.7rem;border-top:2px solid var(--ink)}
h3{font-size:1.05rem;font-weight:600;margin:2rem 0 .5rem}
sub,sup{font-size:.72em;line-height:0}
a{color:var(--measured);text-decoration-thickness:1px;text-underline-offset:.15em}
.kind,nav,table,figcaption,.fine,pre,svg,dl{font-family:"Avenir Next",Avenir,"Segoe UI","Helvetica Neue",
"Liberation Sans",Arial,sans-serif}
.kind{font-size:.8rem;letter-spacing:.08em;text-transform:uppercase;color:var(--soft);margin:0}
.fine,figcaption{font-size:.84rem;line-height:1.45;color:var(--soft)}
nav{font-size:.88rem;margin:1.2rem 0 0}
nav ul{list-style:none;padding:0;display:flex;flex-wrap:wrap;gap:.2rem 1.3rem;max-width:none}
.verdict{border-left:6px solid var(--measured);padding:.2rem 0 .2rem 1.3rem;margin:1.8rem 0}
.verdict.disagrees{border-left:6px double var(--reference)}
.verdict.undecided,.verdict.none{border-left:6px dotted var(--soft)}
.verdict .word{font-size:1.5rem;font-weight:600;margin:.1rem 0 .5rem;line-height:1.25}
.scroll{overflow-x:auto;margin:.8rem 0;-webkit-overflow-scrolling:touch}
table{border-collapse:collapse;font-size:.86rem;font-variant-numeric:tabular-nums lining-nums}
th,td{padding:.26rem 1.3rem .26rem 0;text-align:right;white-space:nowrap}
th:last-child,td:last-child{padding-right:.2rem}
thead th{vertical-align:bottom;border-bottom:1.5px solid var(--ink);font-weight:600}
thead small{display:block;font-weight:400;color:var(--soft);font-size:.92em}
th:first-child,td:first-child{position:sticky;left:0;background:var(--paper)}
tbody tr{border-bottom:1px solid var(--rule)}
caption{text-align:left;font-weight:600;padding:.2rem 0}
.wide thead th{white-space:normal;max-width:9rem}
.comparison td:last-child{text-align:left}.comparison .scroll{margin:0 0 .8rem}
.comparison th,.comparison td{padding-right:.8rem}
.health th,.health td{text-align:left;white-space:normal;vertical-align:top;padding-right:1.6rem}
.health td:first-child{white-space:nowrap}.health td:nth-child(n+3){min-width:7rem}
.health td:nth-child(2){min-width:13rem;color:var(--soft)}
.z{display:inline-block;min-width:2.6em}
.strip{width:60px;height:12px;vertical-align:-1px;margin-right:.2rem}
.strip .axis{stroke:var(--quiet);stroke-width:1}.strip .within{stroke:var(--rule);stroke-width:6}
.strip circle{fill:var(--measured);stroke:var(--measured);stroke-width:1.4}
.strip .beyond{fill:var(--paper);stroke:var(--reference)}
.plots{display:grid;grid-template-columns:repeat(auto-fit,minmax(min(100%,25rem),1fr));gap:1.6rem 1.8rem;margin:1rem 0}
.small.plots{grid-template-columns:repeat(auto-fill,minmax(13rem,1fr));gap:1rem}
figure{margin:0;break-inside:avoid;page-break-inside:avoid}
figure>svg{display:block;width:100%;height:auto;max-width:34rem;overflow:visible}
figcaption{margin-top:.3rem;max-width:34rem}
svg text{font-size:12.5px;fill:var(--soft);font-variant-numeric:tabular-nums}
svg .axis-label,svg .legend{fill:var(--ink)}
svg .note{font-size:11px;fill:var(--ink);paint-order:stroke;stroke:var(--paper);stroke-width:3px}
.small svg text{font-size:11.5px}
.grid{stroke:var(--rule);stroke-width:.8;fill:none}
.frame{stroke:var(--ink);stroke-width:1;fill:none}
.line{fill:none;stroke-width:1.7;stroke-linejoin:round;stroke-linecap:round}
.line.thin{stroke-width:.9}
.band{fill-opacity:.17;stroke:none}
.shade{fill-opacity:.11;stroke:none}.shade.measured{fill:var(--measured)}.shade.accent{fill:var(--accent)}
.level{fill:none;stroke-width:.9}.level.measured{stroke:var(--measured)}.level.accent{stroke:var(--accent)}
.dot{fill:var(--ink)}
.bar{stroke-width:1.4;fill:none}
.span{fill:var(--wash);stroke:var(--quiet);stroke-width:.8;stroke-dasharray:2 2}
.line.measured,.bar.measured,.cross.measured{stroke:var(--measured)}
.line.reference,.bar.reference,.cross.reference{stroke:var(--reference)}
.line.accent,.bar.accent,.cross.accent{stroke:var(--accent)}.line.quiet{stroke:var(--quiet)}
.band.measured,.disc.measured{fill:var(--measured)}.band.reference,.disc.reference{fill:var(--reference)}
.band.accent,.disc.accent{fill:var(--accent)}.band.quiet{fill:var(--quiet);fill-opacity:.25}
.ring{fill:var(--paper);stroke-width:1.8}.ring.measured{stroke:var(--measured)}.ring.accent{stroke:var(--accent)}
.cross{fill:none;stroke-width:1.9}
code{font:.86em ui-monospace,"SF Mono",Menlo,Consolas,"Liberation Mono",monospace;white-space:nowrap}
pre{background:var(--wash);padding:1rem;overflow-x:auto;font:.8rem/1.5 ui-monospace,"SF Mono",Menlo,Consolas,
"Liberation Mono",monospace}
dl{display:grid;grid-template-columns:max-content 1fr;gap:.25rem 1.5rem;font-size:.88rem}
dt{color:var(--soft)}dd{margin:0;overflow-wrap:anywhere}
summary{cursor:pointer;font-size:.9rem;color:var(--measured)}
@media (max-width:40rem){body{font-size:16px}main{padding:1.4rem 1rem 3rem}h1{font-size:1.6rem}
.health td:nth-child(2){min-width:8rem}
.verdict{padding-left:.9rem}th,td{padding-right:.8rem}.small.plots{grid-template-columns:repeat(2,1fr)}
dl{grid-template-columns:1fr}dd{margin-bottom:.4rem}}
@media print{@page{margin:16mm 15mm}:root{--paper:#fff}body{font-size:10.5pt;background:none}
main{max-width:none;padding:0}nav,details{display:none}a{color:inherit;text-decoration:none}
h2{break-after:avoid;page-break-after:avoid;margin-top:2rem}h3{break-after:avoid;page-break-after:avoid}
.plots{grid-template-columns:1fr 1fr;gap:1rem}.small.plots{grid-template-columns:repeat(4,1fr);gap:.7rem}
.scroll{overflow:visible}
.comparison table{break-inside:avoid;page-break-inside:avoid}
table{font-size:8.2pt}th,td{padding-right:.7rem}tr,.verdict,li{break-inside:avoid;page-break-inside:avoid}
thead{display:table-header-group}pre{white-space:pre-wrap;overflow-wrap:anywhere;background:none;padding:0}
*{-webkit-print-color-adjust:exact;print-color-adjust:exact}}
"""
