"""The blind index is built once, whoever asks first, and does without a folder where none can be written."""

from __future__ import annotations

import multiprocessing
import os
from pathlib import Path

import numpy as np
import pytest

SMALL = 400  # stars: the whole sky in a moment


def build(cache: str, start: object, answers: object) -> None:
    """In a process of its own: build a small index with this cache folder, and tell what came of it."""
    os.environ["XDG_CACHE_HOME"] = cache
    from imaging.stars import gathering, index, neighbours

    gathering.LEVELS = index.LEVELS = (neighbours.Level(SMALL, 8),)
    ticks: list[tuple[int, int]] = []
    start.wait(60)
    built = index.quad_index(lambda done, total: ticks.append((done, total)))
    again = index.quad_index()
    mapped = isinstance(built.packed, np.memmap)
    answers.put((len(built), int(built.packed.sum(dtype=np.int64)), mapped, len(ticks), len(again)))


def answers_of(cache: Path, processes: int) -> list[tuple[int, int, bool, int, int]]:
    context = multiprocessing.get_context("spawn")
    start, answers = context.Barrier(processes), context.Queue()
    running = [context.Process(target=build, args=(str(cache), start, answers)) for _ in range(processes)]
    for one in running:
        one.start()
    told = [answers.get(timeout=100) for _ in running]
    for one in running:
        one.join(20)
    assert all(one.exitcode == 0 for one in running)
    return told


@pytest.mark.slow
def test_two_processes_that_build_at_once_both_get_the_one_index(tmp_path):
    one, other = answers_of(tmp_path, 2)
    assert one[:2] == other[:2]
    assert one[0] > 1000
    folders = [path.name for path in (tmp_path / "syzygraph").iterdir() if "quads" in path.name]
    assert len(folders) == 1
    assert not folders[0].startswith(".part")
    (later,) = answers_of(tmp_path, 1)
    assert later[:2] == one[:2]
    assert later[2]  # mapped from the file
    assert later[3] == 0  # nothing was built


@pytest.mark.slow
@pytest.mark.parametrize("damage", ["a file in the way", "a damaged index"])
def test_a_cache_that_cannot_be_used_costs_time_and_nothing_else(tmp_path, damage):
    if damage == "a file in the way":
        (tmp_path / "cache").write_text("not a folder")
        (told,) = answers_of(tmp_path / "cache", 1)
        assert not told[2]
    else:
        (first,) = answers_of(tmp_path, 1)
        (folder,) = (path for path in (tmp_path / "syzygraph").iterdir() if "quads" in path.name)
        (folder / "packed.npy").write_bytes(b"\x93NUMPY")
        (told,) = answers_of(tmp_path, 1)
        assert told[:2] == first[:2]
    assert told[0] > 1000
    assert told[3] > 0  # progress was told
    assert told[4] == told[0]  # and it is not built again for the next frame


@pytest.fixture(scope="module")
def small_index():
    """An index of the 400 brightest stars, made in memory, and the unit vectors of the whole list."""
    from imaging.stars import gathering, neighbours
    from imaging.stars.catalogue import vectors_of
    from imaging.stars.index import QuadIndex
    from planner.sky.starlist import star_list

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(gathering, "LEVELS", (neighbours.Level(SMALL, 8), neighbours.Level(100, 9)))
        quads = gathering.gathered()
    table = star_list()
    index = QuadIndex(quads.directory(), np.concatenate(list(quads.in_order())), quads.levels)
    return index, vectors_of(table["ra_deg"], table["dec_deg"])


def test_every_quad_is_found_by_its_own_shape(small_index):
    from imaging.stars.groups import coded

    index, vectors = small_index
    groups = coded(vectors, index.quads(np.arange(len(index)))[0])
    assert len(groups) == len(index)
    asked, found = index.like(groups.codes, 0.006)  # the codes kept are rounded
    assert set(asked[asked == found].tolist()) == set(range(len(index)))


def test_what_is_found_is_all_that_is_near_and_nothing_else(small_index):
    from imaging.stars.groups import coded

    index, vectors = small_index
    rng = np.random.default_rng(3)
    codes = np.sort(rng.random((200, 5)), axis=1)[:, ::-1]
    asked, found = index.like(codes, 0.05)
    held = np.round(coded(vectors, index.quads(np.arange(len(index)))[0]).codes * 255) / 255
    away = np.linalg.norm(held[None] - codes[:, None], axis=2)
    assert set(zip(asked.tolist(), found.tolist(), strict=True)) == set(
        zip(*(rows.tolist() for rows in np.nonzero(away < 0.05)), strict=True)
    )


def test_no_four_stars_of_a_level_stand_in_it_twice_and_none_is_forgotten(small_index):
    """Against the plain way: all combinations of all neighbours as sets."""
    from itertools import combinations

    index, _ = small_index
    for level in index.levels:
        numbers = np.concatenate(list(level.numbers()))
        held = [frozenset(quad) for quad in level.quads(numbers).tolist()]
        wanted = {
            frozenset([star, *(near[i] for i in ranks)])
            for star, near in enumerate(level.near.tolist())
            for ranks in combinations(range(len(near)), 3)
        }
        assert len(held) == len(set(held))
        assert set(held) == wanted
