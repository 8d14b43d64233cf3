"""Work in several processes: everything is done once, and a process that dies costs its own piece only."""

from __future__ import annotations

import itertools

import pytest
from support.dying import fails, killed_once, square

from strainkit.run.pool import Died, over_processes


@pytest.mark.parametrize("workers", [1, 2])
def test_every_item_once(workers):
    found = list(over_processes(square, range(23), workers))
    assert sorted(found) == [(n, n * n) for n in range(23)]


def test_a_piece_that_kills_its_process_is_told_apart():
    numbers = [*range(9), -1, *range(9, 20)]
    found = dict(over_processes(square, numbers, 2))
    assert isinstance(found.pop(-1), Died)
    assert found == {n: n * n for n in range(20)}


def test_a_process_killed_from_outside_costs_nothing(tmp_path):
    tasks = [(tmp_path / "mark", n) for n in range(12)]
    found = dict(over_processes(killed_once, tasks, 2))
    assert {task[1]: value for task, value in found.items()} == {n: n * n for n in range(12)}


def test_an_exception_of_the_work_ends_it():
    with pytest.raises(RuntimeError, match="no "):
        list(over_processes(fails, range(5), 2))


def test_items_are_taken_as_they_are_needed():
    """An endless supply is no trouble, and leaving early stops the workers."""
    first = list(itertools.islice(over_processes(square, itertools.count(), 2), 30))
    assert sorted(n for n, _ in first)[0] == 0
    assert all(value == n * n for n, value in first)
