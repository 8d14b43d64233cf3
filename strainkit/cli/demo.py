"""strainkit demo."""

from __future__ import annotations

from strainkit.cli.options import Quiet


def demo(quiet: Quiet = False) -> None:
    """The whole path on a sample cell, here and now."""
