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
    from imaging.stars import index

    index.LEVELS = (index.Level(SMALL, 8),)
    ticks: list[tuple[int, int]] = []
    start.wait(60)
    built = index.quad_index(lambda done, total: ticks.append((done, total)))
    again = index.quad_index()
    mapped = isinstance(built.keys, np.memmap)
    answers.put((len(built), int(built.keys.sum()), mapped, len(ticks), len(again)))


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
        (folder / "codes.npy").write_bytes(b"\x93NUMPY")
        (told,) = answers_of(tmp_path, 1)
        assert told[:2] == first[:2]
    assert told[0] > 1000
    assert told[3] > 0  # progress was told
    assert told[4] == told[0]  # and it is not built again for the next frame
