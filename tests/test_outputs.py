"""What exists is kept, and nothing is left half written."""

from __future__ import annotations

import pytest

from planner.errors import OutputExistsError
from planner.outputs import whole_file


def test_a_file_that_exists_is_kept(tmp_path):
    kept = tmp_path / "plan.yaml"
    kept.write_text("mine")
    with pytest.raises(OutputExistsError, match="--force"), whole_file(kept) as part:
        part.write_text("other")
    assert kept.read_text() == "mine"


def test_force_replaces_it_in_one_step(tmp_path):
    target = tmp_path / "plan.yaml"
    target.write_text("old")
    with whole_file(target, force=True) as part:
        part.write_text("new")
        assert target.read_text() == "old"
    assert target.read_text() == "new"


def test_a_failure_leaves_neither_the_file_nor_its_temporary(tmp_path):
    with pytest.raises(ZeroDivisionError), whole_file(tmp_path / "track.ecsv") as part:
        part.write_text("half")
        raise ZeroDivisionError
    assert list(tmp_path.iterdir()) == []


def test_a_file_that_appeared_meanwhile_is_kept(tmp_path):
    target = tmp_path / "plan.yaml"
    with pytest.raises(OutputExistsError), whole_file(target) as part:
        part.write_text("ours")
        target.write_text("theirs")
    assert target.read_text() == "theirs"
