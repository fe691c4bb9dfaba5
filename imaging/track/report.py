"""report.html: one self-contained page, the verdict first, readable on a phone and by red light."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from html import escape
from pathlib import Path

import numpy as np

from imaging.track.cutout import Cutout
from imaging.track.interactive import head, light_plot, plots
from imaging.track.result import CLOCK_TOLD_S, CheckResult, duration_text, frames, with_sigma
from planner.outputs import whole_file

ROWS_SHOWN = 400


def write_report(
    result: CheckResult, path: Path, cutouts: Mapping[int, Cutout] | None = None, force: bool = False
) -> None:
    """Write the page; `cutouts` by row number. Raises OutputExistsError when it exists and not `force`."""
    with whole_file(path, force) as part:
        part.write_text(page(result, cutouts or {}), encoding="utf-8")


def page(result: CheckResult, cutouts: Mapping[int, Cutout]) -> str:
    """Return the page as HTML that needs nothing from outside."""
    in_head, body, script = plots(result) if result.measured else ("", "", "")
    light, light_script = light_plot(result) if result.star is not None else ("", "")
    if light and not in_head:
        in_head = head()
    pictures = {
        number: [
            cut.data_uri,
            *(round(v, 4) if np.isfinite(v) else None for v in (*cut.measured, *cut.predicted)),
        ]
        for number, cut in cutouts.items()
    }
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="{_POLICY}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{escape(result.title)}: checked</title>
<style>{_STYLE}</style>
{in_head}
</head><body>
<header>
<p class="title">{escape(result.title)} <button id="red" type="button" aria-pressed="false">red light</button></p>
<p class="verdict">{prose(result.verdict)}</p>
{_findings(result)}
{_numbers(result)}
</header>
<main>
{_light_section(result, light)}
{_plots_section(body, pictures)}
{_contacts(result)}
{_set_aside(result)}
{_table(result)}
{_provenance(result)}
</main>
<script>const CUTOUTS = {json.dumps(pictures, separators=(",", ":"))};
{_SCRIPT}</script>
{script}
{light_script}
</body></html>
"""


def prose(text: str) -> str:
    """Return a sentence for the page: numbers stay with their errors and units, `options` are set as code."""
    kept = re.sub(r" ± ([\d.]+) ", "\u00a0±\u00a0\\1\u00a0", text)
    return re.sub(r"`([^`]+)`", r"<code>\1</code>", escape(kept))


def _findings(result: CheckResult) -> str:
    if not result.findings:
        return '<p class="quiet">Nothing else was found amiss.</p>' if result.measured else ""
    items = "".join(
        f"<li><b>{escape(finding.name)}</b> {prose(finding.sentence)}{_odds(finding.odds)}</li>"
        for finding in result.findings
    )
    return f'<ul class="findings">{items}</ul><p class="quiet">Findings are told, never applied.</p>'


def _odds(odds: float) -> str:
    if not np.isfinite(odds):
        return ""
    if odds >= 1e6:
        return ' <span class="odds">over a million to one</span>'
    return f' <span class="odds">{odds:,.0f} to one</span>'


def _numbers(result: CheckResult) -> str:
    cells = [("frames", f"{result.measured} measured, {result.on_track} on track")]
    if result.set_aside:
        cells.append(("set aside", frames(len(result.set_aside))))
    if result.clock_offset_sigma_s < CLOCK_TOLD_S:
        offset = with_sigma(result.clock_offset_s, result.clock_offset_sigma_s)
        size = f" ({duration_text(result.clock_offset_s)})" if abs(result.clock_offset_s) >= 120 else ""
        cells.append(("clock, stamps − UTC", f"{offset} s{size}"))
    if np.isfinite(result.rms_along_arcsec):
        rms = f"{result.rms_along_arcsec:.2g}″ along, {result.rms_across_arcsec:.2g}″ across"
        cells.append(("residual rms after the fit", rms))
    if np.isfinite(result.scale_arcsec_px):
        scale = with_sigma(result.scale_arcsec_px, result.scale_sigma_arcsec_px)
        cells.append(("scale", f"{scale} ″/px"))
    if np.isfinite(result.rotation_deg):
        cells.append(
            ("up points to position angle", f"{with_sigma(result.rotation_deg, result.rotation_sigma_deg)}°")
        )
    inner = "".join(f"<div><dt>{escape(name)}</dt><dd>{escape(value)}</dd></div>" for name, value in cells)
    return f'<dl class="numbers">{inner}</dl>'


def _plots_section(body: str, pictures: dict) -> str:  # type: ignore[type-arg]
    if not body:
        return ""
    hint = "Touch a point for its numbers" + ("; click it for its piece of the frame." if pictures else ".")
    return f"""<section><h2>Observed minus computed</h2>
<p class="quiet">{hint} Along is the direction of motion; the line is what the clock offset alone makes.</p>
<div class="plots">{body}</div>
<figure id="cutout" hidden><div class="picture"><img alt="piece of the frame"><svg viewBox="0 0 100 100">
<circle id="m" r="5"></circle><path id="p" d="M-12,0H-6M6,0H12M0,-12V-6M0,6V12"></path></svg></div>
<figcaption></figcaption></figure></section>"""


def _light_section(result: CheckResult, body: str) -> str:
    if not body or result.star is None:
        return ""
    how = (
        "divided by a comparison" if result.star.compared else "no comparison was steady enough to divide by"
    )
    return f"""<section><h2>The star's light</h2><p class="quiet">Summed in {result.star.aperture_px:.1f} px about its
place, sky taken off, {how}; 1 is the whole star. A bar is an exposure, the full line the instant as timed, the broken
one as predicted.</p>
<div class="plots">{body}</div></section>"""


def _star_contacts(result: CheckResult) -> str:
    from planner.sky.timescale import utc_iso

    rows = ""
    for contact in result.contacts:
        late = contact.stamped_tt_s - contact.predicted_tt_s
        spread = float(np.hypot(contact.sigma_s, contact.predicted_sigma_s))
        texts = (
            contact.name,
            f"{with_sigma(late, spread)} s",
            f"{utc_iso(contact.stamped_tt_s, 3)} ± {contact.sigma_s:.2g} s",
            f"{utc_iso(contact.predicted_tt_s, 2)} ± {contact.predicted_sigma_s:.2g} s",
            f"1 in 10^{-contact.false_alarm_log10:.0f}",
            contact.note,
        )
        rows += "<tr><td>" + "</td><td>".join(escape(text) for text in texts) + "</td></tr>"
    titles = "</th><th>".join(
        ("contact", "difference", "measured, frames' clock", "predicted, UTC", "chance of noise alone", "")
    )
    return f"""<section><h2>Contacts</h2><p class="quiet">Read off the light curve; errors hold the frames' clock.</p>
<div class="wide"><table><tr><th>{titles}</th></tr>{rows}</table></div></section>"""


def _contacts(result: CheckResult) -> str:
    if not result.contacts:
        return ""
    if result.star is not None:
        return _star_contacts(result)
    from planner.sky.timescale import utc_iso

    rows = "".join(
        "<tr><td>"
        + "</td><td>".join(
            escape(text)
            for text in (
                contact.name.replace("_", " "),
                f"{with_sigma(contact.stamped_tt_s - contact.predicted_tt_s, contact.sigma_s)} s",
                str(utc_iso(contact.stamped_tt_s, 1)),
                str(utc_iso(contact.predicted_tt_s, 1)),
            )
        )
        + "</td></tr>"
        for contact in result.contacts
    )
    return f"""<section><h2>Contacts</h2><p class="quiet">Measured from the chord against the limb, by the frames'
own clock.</p><div class="wide"><table><tr><th>contact</th><th>difference</th>
<th>measured, frames' clock</th><th>predicted, UTC</th></tr>{rows}</table></div></section>"""


def _set_aside(result: CheckResult) -> str:
    if not result.set_aside:
        return ""
    items = "".join(f"<li><b>{escape(a.file)}</b> {escape(a.reason)}</li>" for a in result.set_aside)
    return f"<section><h2>Set aside</h2><ul>{items}</ul></section>"


def _table(result: CheckResult) -> str:
    def cell(value: float) -> str:
        return f"{value:+.2f}" if np.isfinite(value) else "–"

    lines = []
    for row in result.rows[:ROWS_SHOWN]:
        texts = (
            row.file,
            cell(row.along_arcsec),
            cell(row.across_arcsec),
            cell(row.sigma_along_arcsec).lstrip("+"),
            row.verdict,
            row.utc_mid,
            row.solved_by,
            row.reason,
        )
        inner = "</td><td>".join(escape(text) for text in texts)
        lines.append(f'<tr class="{escape(row.verdict)}"><td>{inner}</td></tr>')
    more = len(result.rows) - ROWS_SHOWN
    note = f'<p class="quiet">{more} more rows are in track.ecsv.</p>' if more > 0 else ""
    titles = "</th><th>".join(
        ("file", "along ″", "across ″", "σ ″", "verdict", "mid-exposure, UTC", "solved by", "reason")
    )
    return f"""<section><details{" open" if len(result.rows) <= 25 else ""}><summary><h2>Frames</h2></summary>
<div class="wide"><table><tr><th>{titles}</th></tr>{"".join(lines)}</table></div>{note}</details></section>"""


def _provenance(result: CheckResult) -> str:
    items = "".join(
        f"<li>{escape(str(name))}: {escape(str(value))}</li>" for name, value in result.provenance.items()
    )
    return f"<section><details><summary><h2>Made with</h2></summary><ul>{items}</ul></details></section>"


# the page fetches nothing, whatever a library in it may try
_POLICY = (
    "default-src 'none'; img-src data: blob:; style-src 'unsafe-inline'; font-src data:; "
    "script-src 'unsafe-inline' 'unsafe-eval'"
)
_STYLE = """
:root{color-scheme:dark}
body{margin:0 auto;max-width:72rem;padding:1rem;background:#14110f;color:#f2e6d8;
font:1rem/1.5 system-ui,sans-serif}
body.red::after{content:"";position:fixed;inset:0;background:#f00;mix-blend-mode:multiply;pointer-events:none;
z-index:2147483647}
body.red .quiet,body.red dt,body.red .odds,body.red .title,body.red tr.unmeasured td{color:#fff}
.title{margin:0;color:#c9bcae}
.verdict{font-size:clamp(1.25rem,4.5vw,1.9rem);line-height:1.3;font-weight:600;margin:.4rem 0 .8rem}
h2{font-size:1.15rem;margin:1.6rem 0 .3rem;display:inline-block}
.quiet{color:#b3a79a;margin:.2rem 0;font-size:.92rem}
.findings{padding:0;list-style:none}
.findings li{border-left:.35rem solid #ffc46b;padding:.3rem .7rem;margin:.4rem 0;background:#221d19}
.odds{color:#c9bcae;white-space:nowrap}
.numbers{display:grid;grid-template-columns:repeat(auto-fit,minmax(11rem,1fr));gap:.5rem;margin:.8rem 0}
.numbers div{background:#221d19;padding:.4rem .7rem}
dt{color:#b3a79a;font-size:.85rem}dd{margin:0;font-size:1.05rem;font-variant-numeric:tabular-nums}
button{float:right;background:#221d19;color:#f2e6d8;border:1px solid #8d8379;padding:.3rem .7rem;font:inherit}
.wide{overflow-x:auto}
table{border-collapse:collapse;font-size:.85rem;font-variant-numeric:tabular-nums}
td,th{padding:.2rem .6rem;text-align:left;border-bottom:1px solid #3a332d;white-space:nowrap}
td:last-child{white-space:normal;min-width:22rem}
tr.off-track td{font-weight:600}tr.off-track td:first-child::before{content:"✕ "}
tr.unmeasured td{color:#b3a79a}
code{background:#3a332d;padding:0 .25rem}
summary{cursor:pointer}
#cutout{margin:.6rem 0;display:flex;gap:1rem;flex-wrap:wrap;align-items:flex-start}
#cutout[hidden]{display:none}
.picture{position:relative;width:min(18rem,80vw);aspect-ratio:1}
.picture img,.picture svg{position:absolute;inset:0;width:100%;height:100%;image-rendering:pixelated}
.picture circle,.picture path{fill:none;stroke:#ffc46b;stroke-width:1.2}
.picture path{stroke:#fff;stroke-width:1.6}
figcaption{font-size:.92rem;max-width:22rem;white-space:pre-line}
"""

_SCRIPT = """
const redButton = document.getElementById("red");
function setRed(on) {
  document.body.classList.toggle("red", on);
  redButton.setAttribute("aria-pressed", on);
}
// a page opened again at night stays red; some browsers keep nothing for a file
try { setRed(localStorage.getItem("red") === "1"); } catch (nothingKept) {}
redButton.onclick = () => {
  const on = !document.body.classList.contains("red");
  setRed(on);
  try { localStorage.setItem("red", on ? "1" : "0"); } catch (nothingKept) {}
};
function showCutout(i, text) {
  const box = document.getElementById("cutout"), cut = CUTOUTS[i];
  if (!box) return;
  box.hidden = false;
  box.querySelector(".picture").style.display = cut ? "" : "none";
  if (cut) {
    box.querySelector("img").src = cut[0];
    const put = (id, x, y) => {
      const mark = document.getElementById(id);
      mark.style.display = x === null ? "none" : "";
      if (x !== null) mark.setAttribute("transform", `translate(${100 * x},${100 * y})`);
    };
    put("m", cut[1], cut[2]);
    put("p", cut[3], cut[4]);
  }
  box.querySelector("figcaption").textContent = text +
    (cut ? "\\nring: measured; cross: predicted at the stamped time" : "\\n(no picture kept of this frame)");
}
window.showCutout = showCutout;
"""
