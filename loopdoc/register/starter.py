"""The small register that `loopdoc new` writes."""

from __future__ import annotations

from importlib.resources import files

NAMES = ("register.yaml", "units/10-feed.yaml")


def starter_files() -> dict[str, bytes]:
    """Content of each file of the starter register, by its name."""
    folder = files("loopdoc.templates").joinpath("starter")
    return {name: folder.joinpath(*name.split("/")).read_bytes() for name in NAMES}
