"""How the page looks: on light and dark screens, narrow ones, and on paper."""

from __future__ import annotations

from spectral.reporting.palette import PAPER_NAMES

_LIGHT = "--paper:#fbfaf6;--panel:#f1efe7;--rule:#cfccc0;--good:#175a44;--link:#0b5f7a;"
_DARK = "--paper:#15191e;--panel:#1e242b;--rule:#3b444d;--good:#7fd3b0;--link:#7cc7e2;"

_RULES = """
*{box-sizing:border-box}
html{font-size:100%;-webkit-text-size-adjust:100%}
body{margin:0;background:var(--paper);color:var(--ink);
 font:1rem/1.5 "Noto Sans","DejaVu Sans",Verdana,sans-serif}
a{color:var(--link)}
a:focus-visible,[tabindex]:focus-visible{outline:3px solid var(--accent);
 outline-offset:2px}
.jump{position:absolute;left:-999px}
.jump:focus{left:1rem;top:1rem;background:var(--paper);padding:.4rem .8rem}
.wrap{max-width:71rem;margin:0 auto;padding:0 1.25rem}
.steps{display:flex;align-items:flex-start;height:1.5rem;margin:0 0 1.6rem}
.steps i{flex:1;background:var(--ink)}
h1{font-size:1.65rem;line-height:1.2;margin:0 0 .2rem;overflow-wrap:anywhere}
.kind{margin:0;color:var(--muted)}
.said{font-size:1.15rem;line-height:1.45;margin:1rem 0 1.1rem;max-width:52rem}
.said p{margin:.35rem 0}
.look{border-left:.4rem solid var(--accent);padding:.1rem 0 .1rem .9rem;
 margin:.8rem 0;max-width:52rem}
.look p{margin:.3rem 0}
dl.key{display:grid;grid-template-columns:repeat(auto-fill,minmax(12rem,1fr));
 gap:.9rem 2rem;margin:0 0 1.2rem;padding:.7rem 0;border:solid var(--rule);
 border-width:1px 0}
dl.key div{display:flex;flex-direction:column}
dl.key dt{color:var(--muted);font-size:.86rem}
dl.key dd{margin:0;font-size:1.12rem;font-variant-numeric:tabular-nums}
dl.key dd small{display:block;font-size:.82rem;color:var(--muted)}
nav ul{list-style:none;padding:0;margin:0 0 1.5rem;display:flex;flex-wrap:wrap;
 gap:.2rem 1.2rem;font-size:.92rem}
section{border-top:1px solid var(--rule);padding:1.1rem 0 1.4rem}
h2{font-size:1.22rem;margin:0 0 .5rem}
section>p{max-width:52rem;margin:.4rem 0}
figure{margin:1rem 0}
.sheet{overflow-x:auto}
.sheet img{display:block;max-width:100%;height:auto}
figcaption{font-size:.86rem;color:var(--muted);max-width:56rem;margin-top:.3rem}
.scroll{overflow-x:auto;margin:1rem 0}
.scroll.long{max-height:32rem;overflow-y:auto;border-bottom:2px solid var(--muted)}
table{border-collapse:collapse;font-size:.86rem;font-variant-numeric:tabular-nums}
caption{text-align:left;font-weight:600;padding:.2rem 0 .4rem;font-size:.92rem}
th,td{padding:.24rem .75rem .24rem 0;text-align:left;vertical-align:top;
 border-bottom:1px solid var(--rule)}
thead th{border-bottom:2px solid var(--muted);vertical-align:bottom}
thead th.n{white-space:normal;max-width:8.5rem}
.screen{font-weight:400;color:var(--muted)}
.long thead th{position:sticky;top:0;background:var(--paper)}
tbody th{font-weight:400}
.n{text-align:right;white-space:nowrap}
.swatch{display:inline-block;width:.85em;height:.85em;margin-right:.45em;
 border:1px solid var(--muted);vertical-align:-.06em}
tbody th{white-space:nowrap}
td{overflow-wrap:break-word;white-space:pre-line}
footer{border-top:1px solid var(--rule);padding:1rem 0 2.5rem;font-size:.86rem;
 color:var(--muted)}
footer .safe{color:var(--ink);font-weight:600}
footer p,footer ul{max-width:56rem;margin:.4rem 0}
code{font-family:"DejaVu Sans Mono",monospace;font-size:.92em;overflow-wrap:anywhere}
@media (max-width:46rem){.sheet img{max-width:none;width:46rem}}
@media print{
 body{background:#fff;font-size:9.5pt}
 .wrap{max-width:none;padding:0}
 nav,.jump,.screen{display:none}
 figure,dl.key,tr{break-inside:avoid}
 h2{break-after:avoid}
 .scroll,.scroll.long,.sheet{overflow:visible;max-height:none}
 thead th.n{white-space:normal;max-width:8.5rem}
.long thead th{position:static}
 @page{margin:14mm}
}
"""


def stylesheet() -> str:
    """The page's style rules."""
    light = _LIGHT + _paper_variables(0)
    dark = _DARK + _paper_variables(1)
    return (
        f":root{{color-scheme:light dark;{light}}}"
        f"@media (prefers-color-scheme:dark){{:root{{{dark}}}}}"
        f"@media print{{:root{{{light}}}}}"
        f"{_RULES}"
    )


def _paper_variables(which: int) -> str:
    return "".join(f"--{name}:{pair[which]};" for name, pair in PAPER_NAMES.items())
