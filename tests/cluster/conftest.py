"""A real Slurm of one node, for the tests of this folder."""

from __future__ import annotations

import os
import socket
import subprocess
from pathlib import Path

import pytest

SCRIPT = Path(__file__).parent.parent / "support" / "slurm.sh"


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


@pytest.fixture
def start_slurm(need, tmp_path, monkeypatch):
    """start_slurm(CPUS): start it with so many pretended CPUs; it is stopped after the test."""
    need("sbatch")
    monkeypatch.setenv("PATH", f"{os.environ['PATH']}:/usr/sbin:/sbin")
    need("slurmctld", "slurmd", "munged")
    base = tmp_path / "slurm"

    def start(cpus: int) -> Path:
        arguments = [str(free_port()), str(free_port()), str(cpus)]
        conf = subprocess.run(
            ["bash", SCRIPT, "start", base, *arguments], capture_output=True, text=True, timeout=120, stdin=subprocess.DEVNULL
        )
        assert conf.returncode == 0, conf.stderr
        monkeypatch.setenv("SLURM_CONF", conf.stdout.strip())
        monkeypatch.setenv("OMP_NUM_THREADS", "1")
        return base

    try:
        yield start
    finally:
        if base.exists():
            subprocess.run(["bash", SCRIPT, "stop", base], capture_output=True, timeout=60, stdin=subprocess.DEVNULL)
