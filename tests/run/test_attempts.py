"""What job scripts note down, read back; hand-written logs with known sums."""

from __future__ import annotations

import os

import pytest

from strainkit.run.attempts import Attempts, read_attempts

START = "start 1 2025-03-01T10:00:00Z 8 node7 123_4\n"
#: seconds since the epoch of 2025-03-01T10:00:00Z (date -u -d 2025-03-01T10:00:00Z +%s)
TEN = 1740823200.0


def folder(tmp_path, log="", running=None, done=False):
    if log:
        (tmp_path / "attempts.txt").write_text(log)
    if running is not None:
        (tmp_path / "running").mkdir()
        os.utime(tmp_path / "running", (running, running))
    if done:
        (tmp_path / "done").write_text("1\n")
    return tmp_path


def test_untouched(tmp_path):
    assert read_attempts(tmp_path) == Attempts()


def test_two_attempts(tmp_path):
    log = START + "end 1 2025-03-01T11:30:00Z stopped-by-TERM 143\nstart 2 2025-03-02T00:00:00Z 4 node8 130_4\n"
    found = read_attempts(folder(tmp_path, log + "end 2 2025-03-02T00:15:00Z done 0\n", done=True))
    assert (found.count, found.ended, found.exit_code, found.done_mark) == (2, "done", 0, True)
    assert found.core_hours == pytest.approx(8 * 1.5 + 4 * 0.25)
    assert found.last_core_hours == pytest.approx(1.0)
    assert found.scheduled


@pytest.mark.parametrize(("age", "alive"), [(10, True), (299, True), (301, False), (1e6, False)])
def test_signs_of_life(tmp_path, age, alive):
    found = read_attempts(folder(tmp_path, START, running=TEN + 3600), now=TEN + 3600 + age)
    assert found.alive is alive
    assert found.silent_for == pytest.approx(age)
    assert found.ended == ""
    assert found.core_hours == pytest.approx(8.0)  # up to the last sign of life


def test_by_hand(tmp_path):
    assert not read_attempts(folder(tmp_path, START.replace("123_4", "-"))).scheduled


@pytest.mark.parametrize(
    "rubbish",
    ["\0\1", "start", "end 1 x y z", "start 1 yesterday 8 node -", "stop 1 2 3 4\n", "end 1 2025-03-01T11:30:00Z a 0"],
)
def test_lines_that_make_no_sense_are_passed_over(tmp_path, rubbish):
    found = read_attempts(folder(tmp_path, rubbish + "\n" + START + rubbish.replace("end 1 2025", "end")))
    assert found.count == 1
