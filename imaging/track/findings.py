"""What the difference between observed and computed means: readings of a track, weighed against each other.

A reading is a way to understand the frames: the plan as it stands, a clock a whole hour off, another date, the site's
longitude with the wrong sign, a mirrored camera, another body. Each is fitted (`imaging.track.fit`) and weighed by its
Laplace evidence and by how often such a slip happens; odds are against the plain reading. A claim needs odds of
10 000 to 1, and to be a hundred times likelier than any other reading; nothing is ever applied.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from imaging.track.fit import Priors, TrackFit, fit_track, start_rotation_deg, turn
from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings
from planner.errors import InputError, NoSolutionError

CLAIM_LOG_ODDS = np.log(1e4)
RIVAL_LOG_ODDS = np.log(1e2)
MOST_ODDS = 1e12  # beyond this the model of the noise, not the data, sets the number
SLIP = np.log(1e-3)  # how often any one kind of slip happens, from our judgement
SMALL_CLOCK_S = 120.0
STRAY_ARCSEC = 60.0  # nearer to the target than this, another body is less likely than a wrong site
PROMISING = 30.0  # usual scatters by which most frames may be off before a reading is not even fitted
HALF_HOURS = tuple(n for n in range(-28, 29) if n)  # civil zones lie within 14 h of UTC
DAY_S = 86400.0


@dataclass(frozen=True)
class Finding:
    """One thing found: its name, the odds for it (to one), and what it means in plain words."""

    name: str
    odds: float
    sentence: str
    value: float = float("nan")
    sigma: float = float("nan")
    unit: str = ""


@dataclass(frozen=True)
class Reading:
    """A way to understand the frames, and how well it fits."""

    name: str
    fit: TrackFit
    sightings: Sightings
    path: PredictedPath
    clock_s: float
    log_weight: float
    sentence: str = ""

    @property
    def clock_offset_s(self) -> float:
        """Stamps minus true UTC in this reading."""
        return self.clock_s + self.fit.value["clock_s"]


@dataclass(frozen=True)
class Question:
    """Everything the readings need besides the sightings.

    `other_sites`: name to path, for a flipped sign. `other_bodies`: body to path. `plan_middle_tt_s`: the middle
    of the frames the plan asked for. `jitter_arcsec`: scatter usual for this rig and seeing. `clock_sigma_s`: what the
    rig's clock promises.
    `center_sigma_arcsec`: what the centre of the reference disc may be off by in all frames alike. `roll_deg`: the
    camera's roll as planned at instants (n,): a mount that flips at the meridian turns it by 180 degrees.
    """

    path: PredictedPath
    jitter_arcsec: float
    clock_sigma_s: float
    plan_middle_tt_s: float
    other_sites: dict[str, PredictedPath]
    other_bodies: dict[str, PredictedPath]
    target: str = "the target"
    center_sigma_arcsec: float = 0.0
    roll_deg: Callable[[np.ndarray], np.ndarray] | None = None

    def turned_by(self, tt_s: np.ndarray, clock_s: np.ndarray | float) -> np.ndarray:
        """Return by how much the planned roll differs between instants as stamped and with a clock error taken off."""
        if self.roll_deg is None:
            return np.zeros(np.shape(tt_s - clock_s))
        return self.roll_deg(tt_s - clock_s) - self.roll_deg(tt_s)

    def priors(self, clock_s: float) -> Priors:
        """Return what is known before the frames speak, with a clock that may be off by so much."""
        return Priors(
            clock_s=clock_s, center_arcsec=self.center_sigma_arcsec, jitter_arcsec=self.jitter_arcsec
        )


@dataclass(frozen=True)
class Diagnosis:
    """The reading believed, all readings tried (best first), and the findings.

    `explained` is False when no reading brings the frames onto the prediction.
    """

    reading: Reading
    readings: tuple[Reading, ...]
    findings: tuple[Finding, ...]
    explained: bool


def diagnose(sightings: Sightings, question: Question) -> Diagnosis:
    """Weigh the readings of a track and return the one believed with its findings.

    Raises NoSolutionError when the target is nowhere near its reference in any reading.
    """
    readings = [reading for reading in _readings(sightings, question) if reading is not None]
    if not readings:
        raise NoSolutionError(
            "the target is nowhere near its reference at the times of the frames, in any reading"
        )
    readings.sort(key=lambda reading: -reading.log_weight)
    plain = next((reading for reading in readings if reading.name == "plain"), None)
    best = readings[0]
    rival = next((reading for reading in readings[1:] if _rivals(best, reading)), None)
    plain_weight = plain.log_weight if plain else -np.inf
    claimed = best.name != "plain" and best.log_weight - plain_weight > CLAIM_LOG_ODDS
    findings: list[Finding] = []
    if claimed and rival is not None and rival.name != "plain":
        if best.log_weight - rival.log_weight < RIVAL_LOG_ODDS:
            findings.append(
                Finding(
                    "ambiguous",
                    odds(best.log_weight - rival.log_weight),
                    f"The plan as it stands does not fit; either {lower_first(best.sentence)} or, nearly as "
                    f"likely, {lower_first(rival.sentence)}",
                )
            )
            claimed = False
    believed = best if claimed or plain is None else plain
    if len(sightings) >= 2:
        believed = _settled(believed, question)
    limit = explained_limit_arcsec(sightings, question)
    explained = bool(believed.fit.jitter_arcsec <= limit and believed.fit.used.mean() > 0.5)
    if not explained and not findings:
        findings.append(
            Finding(
                "unexplained",
                float("nan"),
                f"The measured places do not follow the prediction of {question.target}: they scatter by "
                f"{believed.fit.jitter_arcsec:.1f} arcsec, and no slip that was tried (clock, date, site, mirror, "
                "body) explains it.",
            )
        )
    elif believed.name != "plain":
        findings.append(Finding(believed.name, odds(believed.log_weight - plain_weight), believed.sentence))
    return Diagnosis(believed, tuple(readings), tuple(findings), explained)


def _rivals(best: Reading, other: Reading) -> bool:
    """Two readings of one name differ in detail only, and a whole hour is also an odd amount."""
    general = other.name == "clock-far-off" and best.name in ("zone", "date")
    return other.name != best.name and not general


def explained_limit_arcsec(sightings: Sightings, question: Question) -> float:
    """Return the scatter above which a track does not follow its path: far more than seeing and measuring make."""
    own = float(np.sqrt(np.median(np.einsum("nii->n", sightings.covariance_arcsec2)) / 2.0))
    return 5.0 * float(np.hypot(question.jitter_arcsec, min(own, 2.0)))


def odds(log_odds: float) -> float:
    """Return odds to one, no higher than the noise model can defend."""
    return float(min(np.exp(min(log_odds, 60.0)), MOST_ODDS))


def lower_first(text: str) -> str:
    """Return a sentence for use within another."""
    return text[:1].lower() + text[1:].rstrip(".")


def _readings(s: Sightings, q: Question):  # type: ignore[no-untyped-def]
    priors = q.priors(SMALL_CLOCK_S)

    def tried(name, path, clock_s=0.0, log_prior=0.0, sightings=s, sentence="", priors=priors, look=True):
        if name != "plain" and look and not _promising(sightings, path, clock_s, q):
            return None
        if clock_s and s.on_disc:
            sightings = sightings.rolled(q.turned_by(s.tt_s, clock_s))
        try:
            fit = fit_track(sightings, path, priors, start_clock_s=clock_s)
        except (NoSolutionError, np.linalg.LinAlgError, ValueError):
            return None
        clock = float(np.mean(clock_s))
        return Reading(name, fit, sightings, path, clock, fit.log_evidence + log_prior, sentence)

    yield tried("plain", q.path)
    if len(s) < 2:
        return
    hours = [n * 1800.0 for n in HALF_HOURS]
    for clock_s in _closest(s, q, hours, 2):
        yield tried("zone", q.path, clock_s, SLIP - np.log(len(hours)), sentence=_zone_sentence(clock_s))
    days = sorted(_day_candidates(s, q))
    for clock_s in _closest(s, q, days, 2):
        yield tried("date", q.path, clock_s, SLIP - np.log(40.0), sentence=_date_sentence(clock_s))
        for hour in (-1.0, 1.0, -2.0, 2.0):
            both = clock_s + 3600.0 * hour
            sentence = _date_sentence(clock_s) + f" In addition they are {abs(hour):.0f} h off."
            yield tried("date", q.path, both, 2 * SLIP, sentence=sentence)
    for name, path in q.other_sites.items():
        yield tried(name, path, log_prior=SLIP, sentence=_SITE_SENTENCE[name])
    if s.on_disc:
        yield tried("mirrored", q.path, log_prior=SLIP, sightings=s.mirrored(), sentence=_MIRRORED)
    for body, path in q.other_bodies.items():
        sentence = f"What was measured moves as {body.title()} does: it is {body.title()}, not {q.target}."
        yield tried("wrong-body", path, log_prior=SLIP - np.log(8.0), sentence=sentence)
    still = _still_path(s, q.path)
    if still is not None and len(s) >= 3:
        wide = replace(priors, clock_s=0.0, rotation_deg=0.0, log_scale=0.0, center_arcsec=600.0)
        where = "on the disc" if s.on_disc else "among the stars"
        sentence = f"What was measured stands still {where}: it is not {q.target}."
        yield tried("wrong-body", still, log_prior=SLIP, sentence=sentence, priors=wide, look=False)
    if s.on_disc and q.other_bodies and len(s) >= 4:
        sentence = f"What was measured moves with the sky but stands elsewhere than {q.target}: a star or another body."
        wide = replace(priors, center_arcsec=1000.0)
        stray = tried("wrong-body", q.path, log_prior=SLIP, sentence=sentence, priors=wide, look=False)
        if stray and np.hypot(stray.fit.value["east_arcsec"], stray.fit.value["north_arcsec"]) > STRAY_ARCSEC:
            yield stray
    anywhere = replace(priors, clock_s=DAY_S / 2)
    for clock_s in _closest(s, q, list(np.arange(-12.0, 12.01, 0.25) * 3600.0), 1):
        sentence = "The frames' clock is off by an odd amount."
        yield tried("clock-far-off", q.path, clock_s, SLIP, sentence=sentence, priors=anywhere)


_MIRRORED = "The frames are mirrored: left and right are swapped against what the rig file says."
_SITE_SENTENCE = {
    "longitude-sign": "The site's longitude has the wrong sign: the frames fit a site on the other side of Greenwich "
    "(longitudes are east positive).",
    "latitude-sign": "The site's latitude has the wrong sign: the frames fit a site on the other hemisphere.",
}


def _zone_sentence(clock_s: float) -> str:
    side = "ahead of" if clock_s > 0 else "behind"
    return (
        f"The frames' times are {abs(clock_s) / 3600:g} h {side} UTC: a time zone or daylight saving was left in. "
        f"Read them with --zone {_zone_text(clock_s)} or set the camera to UTC."
    )


def _zone_text(clock_s: float) -> str:
    minutes = round(clock_s / 60)
    return f"{'-' if minutes < 0 else '+'}{abs(minutes) // 60:02d}:{abs(minutes) % 60:02d}"


def _date_sentence(clock_s: float) -> str:
    days = round(clock_s / DAY_S)
    side = "later" if days > 0 else "earlier"
    return f"The date in the frames is wrong: it is {abs(days)} day{'s' if abs(days) != 1 else ''} {side} than it was."


def _day_candidates(s: Sightings, q: Question) -> set[float]:
    """Whole days that slips produce: a day or two, a week, a month, a year, and what leads to the plan's own time."""
    days = {1, 2, 3, 7, 28, 29, 30, 31, 365, 366}
    toward = round((float(np.median(s.tt_s)) - q.plan_middle_tt_s) / DAY_S)
    all_days = days | {-day for day in days} | {toward - 1, toward, toward + 1}
    return {day * DAY_S for day in all_days if day}


def _closest(s: Sightings, q: Question, clocks_s: list[float], count: int) -> list[float]:
    """Return the few clock errors, of many, that lay the path best on the sightings, rotation free, scale known."""
    misfit = _misfits(_sample(s), q.path, np.asarray(clocks_s, float), q)
    best = np.argsort(misfit, kind="stable")[:count]
    return [clocks_s[index] for index in best if np.isfinite(misfit[index])]


def _promising(s: Sightings, path: PredictedPath, clock_s: float, q: Question) -> bool:
    """Say whether a reading lays most frames near enough for a fit to be worth its time."""
    own = float(np.sqrt(np.median(np.einsum("nii->n", s.covariance_arcsec2)) / 2.0))
    misfit = _misfits(_sample(s), path, np.array([clock_s]), q)[0]
    return bool(misfit < (PROMISING * np.hypot(q.jitter_arcsec, own)) ** 2)


def _sample(s: Sightings, most: int = 25) -> Sightings:
    return s.part(np.unique(np.linspace(0, len(s) - 1, min(len(s), most)).astype(int)))


def _misfits(s: Sightings, path: PredictedPath, clocks_s: np.ndarray, q: Question) -> np.ndarray:
    """Return the median square distance (k,) of frames from the path, for k clock errors; infinite where there is none.

    Ten minutes more or less are left to each clock, and the roll is free on a disc.
    """
    t = s.tt_s - clocks_s[:, None]
    try:
        both = s.expected(path, np.concatenate([t.ravel(), t.ravel() + 60.0]))
    except InputError:  # beyond the ephemeris: there is no such reading
        if clocks_s.size == 1:
            return np.full(1, np.inf)
        return np.concatenate([_misfits(s, path, clock, q) for clock in clocks_s[:, None]])
    place, later = both.reshape(2, clocks_s.size, len(s), 2)
    good = np.isfinite(place).all(axis=-1) & np.isfinite(later).all(axis=-1)
    measured = s.places
    if s.on_disc:
        by = np.radians(q.turned_by(s.tt_s, clocks_s[:, None]))
        # turned back instead, the predictions ask the measured places for one roll that all frames share
        asked_deg = start_rotation_deg(s, turn(place[..., None, :], -by)[..., 0, :])
        measured = turn(
            np.broadcast_to(measured, place.shape)[..., None, :], np.radians(asked_deg)[:, None] + by
        )
        measured = measured[..., 0, :]
    residual = np.where(good[..., None], measured - place, 0.0)
    velocity = np.where(good[..., None], (later - place) / 60.0, 0.0)
    # what single frames ask of the clock, in the middle: half of them may show something else
    asked = np.sum(residual * velocity, axis=-1) / np.maximum(np.sum(velocity**2, axis=-1), 1e-30)
    enough = good.sum(axis=1) >= 2
    slope = np.zeros(clocks_s.size)
    slope[enough] = np.nanmedian(np.where(good, asked, np.nan)[enough], axis=1)
    slope = np.clip(slope, -600.0, 600.0)[:, None, None]
    square = np.where(good, np.sum((residual - slope * velocity) ** 2, axis=-1), np.nan)
    misfit = np.full(clocks_s.size, np.inf)
    misfit[enough] = np.nanmedian(square[enough], axis=1)
    return misfit


def _still_path(s: Sightings, path: PredictedPath) -> PredictedPath | None:
    """Return a path that stands still where the median of the sightings is."""
    if s.anchor_ra_deg is None or s.anchor_dec_deg is None:
        place = np.median(s.places, axis=0)
    else:
        place = np.array([np.median(s.anchor_ra_deg), np.median(s.anchor_dec_deg)])
    return _Still(path, place, s.on_disc)


class _Still(PredictedPath):
    """A point at rest on the disc or among the stars, in place of the target."""

    def __init__(self, path: PredictedPath, place: np.ndarray, on_disc: bool):
        self._path, self._place, self._on_disc = path, place, on_disc

    def at(self, tt_s):  # type: ignore[no-untyped-def]
        """Return the same place at all times."""
        expected = self._path.at(tt_s)
        fill = np.ones_like(expected.tt_s)
        if self._on_disc:
            return replace(expected, east_arcsec=self._place[0] * fill, north_arcsec=self._place[1] * fill)
        return replace(expected, ra_deg=self._place[0] * fill, dec_deg=self._place[1] * fill)


def _settled(reading: Reading, question: Question) -> Reading:
    """Fit the believed reading once more with a clock that no prior holds, so that its sigma is the data's."""
    free = question.priors(DAY_S)
    if reading.name == "wrong-body":
        return reading
    try:
        fit = fit_track(reading.sightings, reading.path, free, reading.clock_offset_s)
    except (NoSolutionError, np.linalg.LinAlgError):
        return reading
    moved = fit.value["clock_s"] + reading.fit.value["clock_s"]
    return replace(reading, fit=replace(fit, value={**fit.value, "clock_s": moved}))
