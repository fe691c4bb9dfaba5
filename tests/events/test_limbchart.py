"""The chart of the limb shows the target at the limb when it is predicted to be there."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from planner.errors import InputError
from planner.events.catalogue import family
from planner.events.family import EventSpec
from planner.events.limbchart import limb_figure, limb_views
from planner.sky.moonlimb import limb_model
from planner.sky.observer import Observer
from planner.sky.timescale import tt_s_from_iso

SEATTLE = Observer("there", 47.762, -122.067, 0.0)
GRAZE = Observer("at the edge", 33.33, -122.067, 0.0)


def predicted(observer, limb=None, family_name="moon-occults-star", **changes):
    chosen = family(family_name)
    spec = EventSpec(family_name, "star", tt_s_from_iso("1999-05-22T12:00:00Z"), star="Regulus")
    spec = dataclasses.replace(spec, limb=limb, **changes)
    return chosen.predict(chosen.nearest(spec), observer)


@pytest.fixture(scope="module")
def model():
    from tests.conftest import SHARED

    if not (SHARED / "data").is_dir():
        pytest.skip("lunar data absent: ../shared/data is not on this machine")
    return limb_model(SHARED / "data/LDEM_4.IMG")


def heights_at_contacts(view):
    """Return the heights of the target and of the limb at each contact, in km."""
    times = np.array([t for _, t, _ in view.contacts])
    angle = np.interp(times, view.path_tt_s, view.path_angle_deg)
    target = np.interp(times, view.path_tt_s, view.path_height_km)
    return target, np.interp(angle, view.angle_deg, view.height_km)


def test_at_a_contact_the_star_is_at_the_smooth_limb():
    views = limb_views(predicted(SEATTLE))
    assert [view.title for view in views] == ["disappearance", "reappearance"]
    for view in views:
        target, limb = heights_at_contacts(view)
        assert target == pytest.approx(0.0, abs=0.05)
        assert limb == pytest.approx(0.0, abs=1e-6)
    # before it disappears it is above, after it reappears again
    assert views[0].path_height_km[0] > 4 > views[0].path_height_km[-1]
    assert views[1].path_height_km[0] < 4 < views[1].path_height_km[-1]
    assert [view.lit for view in views] == [False, True]


def test_at_a_contact_the_star_is_at_the_real_limb(model):
    for view in limb_views(predicted(SEATTLE, model)):
        target, limb = heights_at_contacts(view)
        assert target == pytest.approx(limb, abs=0.05)
        assert view.sigma_km == model.sigma_km


def test_a_graze_is_drawn_in_one_piece(model):
    (view,) = limb_views(predicted(GRAZE, model))
    target, limb = heights_at_contacts(view)
    assert target == pytest.approx(limb, abs=0.1)
    hidden = view.path_height_km < np.interp(view.path_angle_deg, view.angle_deg, view.height_km)
    # it goes behind mountains twice
    assert np.count_nonzero(np.diff(hidden.astype(int)) == 1) >= 2


def test_a_planet_touches_the_limb_with_its_edge():
    spec = {"body": "venus", "star": None, "date_tt_s": tt_s_from_iso("2023-11-09T10:00:00Z")}
    munich = Observer("there", 48.137, 11.575, 520.0)
    for view in limb_views(predicted(munich, None, "moon-occults-planet", **spec)):
        target, _ = heights_at_contacts(view)
        assert np.abs(target) == pytest.approx(view.path_radius_km, rel=0.01)


def test_what_has_no_limb_is_refused():
    chosen = family("solar-transit")
    transit = chosen.predict(
        chosen.nearest(EventSpec("solar-transit", "mercury", tt_s_from_iso("2032-11-13T12:00:00Z"))), SEATTLE
    )
    with pytest.raises(InputError, match=r"event\.family: found solar-transit"):
        limb_views(transit)
    far = predicted(Observer("far", -40.0, -122.0, 0.0))
    with pytest.raises(InputError, match="does not happen here"):
        limb_views(far)


def test_the_figure_has_a_panel_a_contact_and_the_command_writes_it(tmp_path):
    from planner.cli.main import run_with

    assert len(limb_figure(predicted(SEATTLE)).axes) == 2
    out = tmp_path / "limb.png"
    asked = ["limb", "--event", "moon-occults-star:Regulus:1999-05-22", "--at", "47.762,-122.067,0", "-o"]
    assert run_with([*asked, str(out)]) == 0
    assert out.read_bytes().startswith(b"\x89PNG")
    assert run_with([*asked, str(out)]) == 2
    assert run_with([*asked, str(tmp_path / "limb.doc")]) == 2
