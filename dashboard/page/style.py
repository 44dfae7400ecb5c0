"""How the page looks: its template, the style sheets, and the script that notices silence.

Nothing is loaded from elsewhere. ``PAGE`` styles the page itself, ``PANELS`` the text panels,
each of which Bokeh puts into a shadow tree of its own.
"""

from __future__ import annotations

from dashboard.page import colours
from dashboard.page.axes import FONT

_NUMBERS = ("sheet_density_per_m2", "mobility_m2_per_V_s", "scattering_time_s")


def _place(root: str, class_: str = "") -> str:
    return f'<section class="{class_ or root}">{{{{ embed(roots.{root}) }}}}</section>'


_COLUMNS = (
    ("left", _place("sweeps"), ("resistivity", "residual_xx", "residual_xy")),
    ("middle", "", ("path_sheet_density", "path_mobility", "path_scattering_time")),
)

TEMPLATE = f"""
{{% block postamble %}}<style>{{{{ style | safe }}}}</style>{{% endblock %}}
{{% block contents %}}
{{% from macros import embed %}}
<div id="silent" role="alert" hidden></div>
<main>
  {_place("banner")}
  <header>{_place("head", "headline")}{_place("chooser")}</header>
  {_place("hold")}{_place("hold_box")}
  <div class="hero">
    {_place("verdict")}{"".join(_place(name, "number") for name in _NUMBERS)}{_place("field")}
  </div>
  <div class="board">
    {"".join(
        f'<div class="column {side}">{before}'
        f'{"".join(_place(name, f"plot {name}") for name in names)}</div>'
        for side, before, names in _COLUMNS
    )}
    <div class="column right">
      <h2>Cautions</h2>{_place("cautions", "list cautions")}
      <h2>Standard uncertainty, by source</h2>{_place("budget", "list budget")}
      <h2>Streams</h2>{_place("streams", "list streams")}
      <h2>Events</h2>{_place("events", "list events")}
    </div>
  </div>
  {_place("beat")}
</main>
<script>{{{{ script | safe }}}}</script>
{{% endblock %}}
"""

PAGE = f"""
:root {{ {colours.VARIABLES} --font: {FONT}; }}
* {{ box-sizing: border-box; }}
body {{ background: var(--paper); color: var(--ink); font-family: var(--font); }}
main {{ display: flex; flex-direction: column; gap: 10px; height: 100vh; min-height: 700px;
  padding: 8px 14px 12px; }}
section.beat {{ display: none; }}
header {{ display: flex; align-items: center; gap: 16px; min-height: 32px; }}
.headline {{ flex: 1; min-width: 0; }}
.hero {{ display: grid; gap: 10px; grid-template-columns: 1.12fr 1fr 1fr 1fr 0.8fr;
  min-height: 188px; }}
.hero > section, .plot {{ min-width: 0; min-height: 0; }}
.board {{ flex: 1; min-height: 0; display: grid; gap: 10px;
  grid-template-columns: 1.42fr 1fr 0.86fr; }}
.column {{ display: flex; flex-direction: column; min-width: 0; min-height: 0;
  background: var(--card); border: 1px solid var(--line); border-radius: 8px; padding: 6px; }}
.column.right {{ padding: 10px 12px; overflow: hidden; }}
.plot {{ flex: 1; position: relative; }}
.left .resistivity {{ flex: 3.1; }}
.left .residual_xy {{ flex: 1.32; }}
.middle .path_scattering_time {{ flex: 1.25; }}
h2 {{ font-size: 13px; font-weight: 600; color: var(--soft); margin: 9px 0 3px; flex: none; }}
h2:first-child {{ margin-top: 0; }}
.list {{ overflow-y: auto; flex: none; }}
.list.cautions {{ flex: 0 3 auto; min-height: 60px; }}
.list.budget {{ flex: 0 0 auto; }}
.list.streams {{ flex: 0 0.1 auto; min-height: 76px; }}
.list.events {{ flex: 1 4 60px; min-height: 60px; }}
section.hold {{ min-height: 0; }}
section.hold_box {{ position: fixed; z-index: 8; right: 14px; top: 92px; width: 560px;
  max-width: 96vw; max-height: 86vh; overflow-y: auto; background: var(--card); border-radius: 8px;
  box-shadow: 0 6px 30px #0004; padding: 0 16px; }}
.column > .sweeps {{ flex: none; padding: 1px 8px 5px; }}
#silent {{ position: fixed; z-index: 10; inset: 0 0 auto 0; padding: 14px 20px; text-align: center;
  font: 600 18px var(--font); color: #fff; background: var(--alarm); }}
body.silent main {{ opacity: 0.45; filter: grayscale(1); }}
@media (max-width: 1099px) {{
  main {{ height: auto; }}
  .hero {{ grid-template-columns: 1fr 1fr; }}
  .board {{ display: flex; flex-direction: column; }}
  .plot {{ flex: none !important; height: 240px; }}
  .left .resistivity {{ height: 380px; }}
  .list {{ max-height: none !important; min-height: 0 !important; overflow: visible; }}
  .list.events {{ max-height: 420px !important; overflow-y: auto; }}
}}
@media (max-width: 639px) {{
  main {{ padding: 8px 8px 12px; }}
  header {{ flex-wrap: wrap; }}
  .hero {{ grid-template-columns: 1fr; min-height: 0; }}
}}
"""

CHOOSER = """
:host { font-family: var(--font); margin: 0; }
.bk-btn { font-size: 15px; padding: 3px 14px; color: var(--soft); }
.bk-btn.bk-active { background: var(--ink); border-color: var(--ink); color: #fff; }
"""

PANELS = """
:host { display: block; width: 100%; height: 100%; font-family: var(--font); font-size: 13px;
  line-height: 1.35; color: var(--ink); font-variant-numeric: tabular-nums; }
.bk-clearfix { display: block !important; width: 100%; height: 100%; }
.soft { color: var(--soft); }
.banner { background: var(--alarm-tint); color: var(--alarm); border: 1px solid var(--alarm);
  border-radius: 8px; padding: 8px 14px; font-weight: 600; margin-bottom: 10px;
  overflow-wrap: anywhere; }
.head { display: flex; align-items: baseline; gap: 20px; white-space: nowrap; }
.head .run { flex: 1; overflow: hidden; text-overflow: ellipsis; }
.head .title { font-size: 17px; font-weight: 600; margin-right: 12px; }
.facts { margin-top: auto; padding-top: 6px; color: var(--soft); }
.fact { white-space: nowrap; }
.phase { font-size: 15px; font-weight: 600; color: var(--soft); }
.phase.live { color: var(--good); }
.phase.crashed { color: var(--alarm); }
.card { height: 100%; background: var(--card); border: 1px solid var(--line); border-radius: 8px;
  padding: 10px 14px; display: flex; flex-direction: column; overflow: hidden;
  container-type: inline-size; }
.name { font-size: 14px; color: var(--soft); }
.name::first-letter { text-transform: uppercase; }
.name.second { margin-top: auto; }
.value { white-space: nowrap; line-height: 46px; height: 46px;
  font-size: min(40px, calc(100cqw / var(--ems, 5.4))); }
.digits { font-weight: 600; letter-spacing: -0.02em; }
.spread { font-size: 0.6em; color: var(--soft); }
.unit { font-size: 0.43em; margin-left: 0.4em; }
.old .digits, .old .unit { color: var(--soft); }
.old .also { color: var(--warning); font-weight: 700; }
.also { color: var(--soft); font-size: 14px; min-height: 19px; }
.notyet { font-size: 24px; font-weight: 600; color: var(--soft); margin: 6px 0; }
.left { font-size: 17px; font-weight: 600; line-height: 1.25; }
.verdict { border-width: 2px; }
.verdict .top { display: flex; align-items: center; gap: 12px; }
.verdict .word { font-size: 32px; font-weight: 700; letter-spacing: -0.02em; line-height: 44px; }
.verdict .why { font-size: 14px; margin-top: 2px; }
.verdict .reason { position: relative; padding-left: 13px; line-height: 1.28; }
.verdict .reason::before { content: "–"; position: absolute; left: 0; }
.verdict svg { width: 46px; height: 46px; flex: none; fill: none;
  stroke: currentColor; stroke-width: 4; stroke-linecap: round; stroke-linejoin: round; }
.verdict.stable { background: var(--good-tint); border-color: var(--good); }
.verdict.stable svg, .verdict.stable .word { color: var(--good); }
.verdict.converging { background: var(--quiet-tint); border-color: var(--number); }
.verdict.converging svg, .verdict.converging .word { color: var(--number); }
.verdict.unknown { border-style: dashed; border-color: var(--soft); }
.verdict.unknown .word { font-size: min(32px, 10cqw); white-space: nowrap; }
.verdict.unknown svg { stroke-dasharray: 5 8; color: var(--soft); }
.flag { margin-top: 6px; font-weight: 600; color: var(--warning); }
.flag.loud { color: var(--alarm); }
.flag.quiet { color: var(--soft); font-weight: 400; }
.gauge { position: relative; height: 14px; margin: 5px 0 4px; border-radius: 3px;
  background: var(--quiet-tint); flex: none; }
.gauge .zone { position: absolute; top: 0; bottom: 0; background: var(--target); opacity: 0.22; }
.gauge .bar { position: absolute; top: 4px; bottom: 4px; background: var(--number);
  border-radius: 3px; min-width: 3px; }
.gauge .bar.open-left { border-top-left-radius: 0; border-bottom-left-radius: 0; }
.gauge .bar.open-right { border-top-right-radius: 0; border-bottom-right-radius: 0; }
.gauge .middle { position: absolute; left: calc(50% - 1px); width: 2px; top: 0; bottom: 0;
  background: var(--ink); }
.distance { white-space: nowrap; display: flex; flex-wrap: wrap; align-items: baseline;
  column-gap: 8px; font-size: 13px; }
.distance .now { font-weight: 600; }
.distance .how { margin-left: auto; font-weight: 600; color: var(--number); }
.distance.met .how { color: var(--good); }
.interval span { white-space: nowrap; }
.none { color: var(--soft); }
.caution { background: var(--warning-tint); border-left: 4px solid var(--warning);
  border-radius: 4px; padding: 5px 9px; margin-bottom: 6px; }
.caution .code { font-weight: 700; color: var(--warning); }
.noted { color: var(--soft); border-left: 3px solid var(--line); padding: 0 0 0 8px;
  margin: 4px 0; font-size: 12.5px; line-height: 1.3; overflow-wrap: anywhere; }
.noted .code { font-weight: 600; }
.sweeps { display: flex; flex-wrap: wrap; gap: 0 14px; }
.sweep .arrow { font-weight: 600; }
.sweep.now { color: var(--number); }
.caution .text, .event .said, tr.aside td { overflow-wrap: anywhere; }
table { width: 100%; border-collapse: collapse; }
th { text-align: left; font-weight: 400; color: var(--soft); padding: 0 4px 2px 0; }
th:nth-child(n+3), .figure { text-align: right; white-space: nowrap; padding-left: 6px; }
td { vertical-align: top; padding: 3px 4px 2px 0; white-space: nowrap; }
tr:not(.aside) td { border-top: 1px solid var(--grid); }
td:first-child { max-width: 0; width: 52%; overflow: hidden; text-overflow: ellipsis; }
td .stream { font-weight: 600; margin-right: 8px; }
td .identity { color: var(--soft); font-size: 12px; font-weight: 400; }
tr.aside td { max-width: none; }
.budget td, .streams td { padding-top: 2px; padding-bottom: 1px; }
.budget th { padding-bottom: 0; }
.budget th:nth-child(n+2) { text-align: right; white-space: nowrap; padding-left: 6px; }
.budget .figure { background: linear-gradient(to left, var(--quiet-tint) var(--share, 0%),
  transparent var(--share, 0%)); }
.budget tr.total td { font-weight: 600; }
tr.aside td { font-size: 12px; padding-top: 0; white-space: normal; }
tr.aside td, td.aside { color: var(--soft); }
tr.good .shape { color: var(--good); }
tr.waiting td, tr.ended td { color: var(--soft); }
tr.warning td { background: var(--warning-tint); color: var(--warning); }
tr.warning:not(.aside) td { font-weight: 700; }
.event { display: flex; gap: 8px; padding: 3px 0; border-top: 1px solid var(--grid); }
.event .when { color: var(--soft); min-width: 40px; }
.event .kind { color: var(--soft); min-width: 50px; }
.event.of-caution .kind { color: var(--warning); font-weight: 600; }
.event.of-verdict .kind { color: var(--number); font-weight: 600; }
.hold { display: flex; align-items: center; gap: 14px; padding: 5px 12px; min-height: 34px;
  border: 1px solid var(--line); border-radius: 8px; background: var(--card); }
.hold .word { font-weight: 600; white-space: nowrap; font-size: 15px; }
.hold .told { overflow-wrap: anywhere; }
.hold.armed { border-color: var(--warning); background: var(--warning-tint); }
.hold.begun, .hold.checking { border-color: var(--number); background: var(--quiet-tint); }
.hold.held, .hold.pause { border-color: var(--good); background: var(--good-tint); }
.hold.pause .word { font-size: 18px; color: var(--good); }
.hold.alarm { border-color: var(--alarm); background: var(--alarm); color: #fff; font-size: 17px; }
.hold.alarm .word { font-size: 20px; }
@media (max-width: 639px) {
  .hold { flex-wrap: wrap; gap: 0 14px; }
  .hold .word { white-space: normal; }
}
.cautionary p { margin: 8px 0 4px; overflow-wrap: anywhere; }
.cautionary ul { margin: 0; padding-left: 18px; }
.answer { font-weight: 600; padding: 4px 0 10px; }
.event .bar { color: var(--soft); margin-right: 5px; }
"""

SCRIPT = """
"use strict";
(() => {
  // Counts seconds without a sign of life from the server: what is shown is old then, and must
  // look so. When the server is back, as after a restart, the page is loaded anew.
  const box = document.getElementById("silent");
  let beat = null, silent = 0;
  const newest = () => {
    const doc = window.Bokeh && Bokeh.documents[0];
    const model = doc && doc.get_model_by_name("beat");
    return model ? model.text : null;
  };
  const reload = () => fetch("static/js/bokeh.min.js", {method: "HEAD", cache: "no-store"})
    .then((reply) => { if (reply.ok) location.reload(); }, () => {});
  setInterval(() => {
    const now = newest();
    silent = now === beat ? silent + 1 : 0;
    beat = now;
    const old = silent >= 4;
    document.body.classList.toggle("silent", old);
    box.hidden = !old;
    if (old) {
      box.textContent = "No word from rampside for " + silent + " s: what is shown here is old. "
        + "This page comes back by itself when rampside does.";
      if (silent % 3 === 0) reload();
    }
  }, 1000);
})();
"""
