"""`syzygraph orbit`: the orbit of a planet from its track among the stars, or how well a plan would tell it."""

from __future__ import annotations

import json
from pathlib import Path

import click


@click.command(name="orbit")
@click.argument("plan_path", metavar="PLAN", type=click.Path(dir_okay=False, path_type=Path))
@click.argument(
    "track_path", metavar="[TRACK]", required=False, type=click.Path(dir_okay=False, path_type=Path)
)
@click.option("--json", "as_json", is_flag=True, help="Print the result for a machine.")
def command(plan_path: Path, track_path: Path | None, as_json: bool) -> None:
    """Fit the orbit of the planet in TRACK (a track.ecsv that `check` made with PLAN).

    Without TRACK: how well the frames of PLAN would determine the orbit, if all of them succeed.
    The Earth's own motion is taken as known; nothing else is. Elements are osculating, ecliptic of J2000.

    \b
    Example:
      syzygraph orbit mars.plan.yaml
      syzygraph orbit mars.plan.yaml checked/track.ecsv
    """
    from imaging.track.orbitfit import ELEMENT_NAMES, orbit_of_plan, orbit_of_track
    from imaging.track.result import with_sigma
    from imaging.track.table import read_track
    from planner.sequence.documents import load_plan
    from planner.sky.timescale import utc_iso

    plan = load_plan(plan_path)
    fit = orbit_of_track(plan, read_track(track_path)) if track_path else orbit_of_plan(plan)
    epoch = str(utc_iso(fit.epoch_tt_s, 0))
    if as_json:
        numbers = {
            name: {"value": float(value), "sigma": float(sigma)}
            for name, value, sigma in zip(ELEMENT_NAMES, fit.elements, fit.element_sigma, strict=True)
        }
        numbers["heliocentric_distance_au"] = {
            "value": fit.heliocentric_distance_au,
            "sigma": fit.heliocentric_distance_sigma_au,
        }
        numbers["longitude_of_perihelion_deg"] = {
            "value": fit.longitude_of_perihelion_deg,
            "sigma": fit.longitude_of_perihelion_sigma_deg,
        }
        shown = {
            "body": fit.body,
            "forecast": fit.forecast,
            "epoch_utc": epoch,
            "frames": fit.frames,
            "arc_days": fit.arc_days,
            "residual_rms_arcsec": None if fit.forecast else fit.residual_arcsec,
            **numbers,
            "state_au_au_day_icrs": fit.state.tolist(),
            "state_covariance": fit.state_covariance.tolist(),
        }
        click.echo(json.dumps(shown, indent=2))
        return
    what = "would be known from" if fit.forecast else "from"
    click.echo(
        f"Orbit of {fit.body.capitalize()} {what} {fit.frames} frames over {fit.arc_days:.0f} days, at {epoch}:"
    )
    lines = [("distance from the Sun, au", fit.heliocentric_distance_au, fit.heliocentric_distance_sigma_au)]
    lines += [
        (name.replace("_deg", ", deg").replace("_au", ", au").replace("_", " "), value, sigma)
        for name, value, sigma in zip(ELEMENT_NAMES, fit.elements, fit.element_sigma, strict=True)
    ]
    lines.append(
        (
            "longitude of perihelion, deg",
            fit.longitude_of_perihelion_deg,
            fit.longitude_of_perihelion_sigma_deg,
        )
    )
    for name, value, sigma in lines:
        click.echo(f"  {name:30} {with_sigma(float(value), float(sigma))}")
    if not fit.forecast:
        click.echo(f"  residuals {fit.residual_arcsec:.2f} arcsec rms a coordinate")
