"""Fixtures and the rule for tests that need a program: skipped with a reason, but failing where CI=true."""

from __future__ import annotations

import importlib.util
import json
import os
import signal
import sys
from dataclasses import dataclass

# small matrices: threads would only get in each other's way
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import pytest

# a shell that starts pytest in the background makes all its children deaf to this signal; some tests send it
signal.signal(signal.SIGINT, signal.default_int_handler)


@dataclass
class Result:
    """What a command left behind."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> dict:
        """The one JSON object on standard output."""
        return json.loads(self.out)


@pytest.fixture
def cli(capsys, monkeypatch):
    """Run the command line in this process: cli("fit", run, "--json") -> Result."""
    from strainkit.cli.main import main

    def run(*arguments: object) -> Result:
        monkeypatch.setattr(sys, "argv", ["strainkit", *map(str, arguments)])
        capsys.readouterr()
        try:
            main()
            code = 0
        except SystemExit as stop:
            code = int(stop.code or 0)
        captured = capsys.readouterr()
        assert "Traceback" not in captured.err
        return Result(code, captured.out, captured.err)

    return run


@pytest.fixture
def need():
    """need("tblite") or need("pw.x"): skip, or fail under CI=true, when a module or program is not there."""
    import shutil

    def check(*names: str) -> None:
        for name in names:
            if shutil.which(name) or importlib.util.find_spec(name.replace("-", "_")):
                continue
            if os.environ.get("CI") == "true":
                pytest.fail(f"{name} is not installed, and CI must not skip this")
            pytest.skip(f"{name} is not installed")

    return check


def pytest_collection_modifyitems(config, items):
    """Without -m, leave out what takes long or needs a program, and say so."""
    if config.option.markexpr:
        return
    for item in items:
        for name in ("slow", "engine", "browser"):
            if item.get_closest_marker(name):
                item.add_marker(pytest.mark.skip(reason=f"run by .ci/run, or with: pytest -m {name}"))
