"""A brief may name the user's lunar files, and the limb they hold brings a prediction nearer to what was seen."""

from __future__ import annotations

import shutil

import pytest

from planner.errors import DocumentError
from planner.events.catalogue import family
from planner.sequence.documents import event_spec, load_brief, observer_of
from planner.sky.timescale import tt_s_from_iso
from tests.conftest import ROOT

BRIEF = """title: Regulus behind the Moon
site: {{name: there, latitude_deg: 47.762117, longitude_deg: -122.067, height_m: 0}}
rig: rigs/refractor_1000mm.yaml
event: {{family: moon-occults-star, star: Regulus, date: 1999-05-22{limb}}}
"""
LIMB = ", limb: {elevation: LDEM_4.IMG, orientation: moon_pa_de421_1900-2050.bpc, frame: moon_080317.tf}"


@pytest.fixture
def folder(tmp_path, lunar_data):
    for path in lunar_data.iterdir():
        if path.suffix != ".md":
            shutil.copyfile(path, tmp_path / path.name)
    shutil.copytree(ROOT / "configs/rigs", tmp_path / "rigs")
    return tmp_path


def predicted(folder, limb):
    path = folder / "brief.yaml"
    path.write_text(BRIEF.format(limb=limb))
    brief = load_brief(path)
    spec = event_spec(brief.event)
    found = family(spec.family)
    return found.predict(found.nearest(spec), observer_of(brief.site))


def test_regulus_of_1999_is_within_a_second_of_what_was_seen(folder):
    # video with time signals, stated to 1 s: sehgal.net/regulus.htm (tests/authorities/lunar_occultations.csv)
    seen = {"disappearance": "1999-05-22T03:26:33Z", "reappearance": "1999-05-22T04:36:44Z"}
    smooth, real = predicted(folder, ""), predicted(folder, LIMB)
    for name, utc in seen.items():
        observed = tt_s_from_iso(utc)
        assert abs(real.instant(name).tt_s - observed) < 1.0
        assert abs(real.instant(name).tt_s - observed) < abs(smooth.instant(name).tt_s - observed)
        assert real.instant(name).sigma_s < 0.3 * smooth.instant(name).sigma_s
    assert "moon_pa_de421" in real.conventions["limb"]
    assert "smooth" in smooth.conventions["limb"]


@pytest.mark.parametrize(
    ("limb", "key", "said"),
    [
        (LIMB.replace("LDEM_4", "LDEM_9"), "event.limb.elevation", "no such file"),
        (LIMB.replace("LDEM_4.IMG", "../LDEM_4.IMG"), "event.limb.elevation", "may not leave"),
        (LIMB.replace("elevation: LDEM_4.IMG, ", ""), "event.limb.elevation", "this key is needed"),
        (LIMB.replace("frame:", "frames:"), "event.limb.frames", "frame"),
    ],
)
def test_wrong_limb_files_are_named(folder, limb, key, said):
    with pytest.raises(DocumentError) as caught:
        predicted(folder, limb)
    assert caught.value.key == key
    assert said in str(caught.value)
