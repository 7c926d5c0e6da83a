"""A large register made by repeating the demo register, for the benchmarks."""

from __future__ import annotations

import re
from pathlib import Path

DEMO = Path(__file__).resolve().parent.parent / "examples" / "tarn-hollow"
_TAG = re.compile(r"\b([A-Z]{1,5}-)(10|20|30)(\d\d[A-Z]?\b)")
_CHANNEL = re.compile(r"channel: (?=[A-Z]{2,3}-\d)")
_CABINET = re.compile(r"(?<=, at: )(?=[A-Z]{2,3}-\d)")
_QUOTED_UNIT = re.compile(r'"(10|20|30)"')
_DEMO_UNITS = ("10", "20", "30")


def write_repeated(folder: Path, copies: int) -> None:
    """Write ``copies`` of the demo plant as one register, each copy with unit numbers of its own."""
    root = (DEMO / "register.yaml").read_text(encoding="utf-8")
    head, _, units = root.partition("units:\n")
    body, separator, rest = units.partition("policy:")
    numbers = [
        {unit: f"{100 + 3 * copy + index}" for index, unit in enumerate(_DEMO_UNITS)} for copy in range(copies)
    ]
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "units").mkdir(exist_ok=True)
    repeated = "".join(_renumbered(body, by_unit) for by_unit in numbers)
    head = head.replace(r"(?P<unit>\d{2})", r"(?P<unit>\d{3,4})")
    (folder / "register.yaml").write_text(f"{head}units:\n{repeated}{separator}{rest}", encoding="utf-8")
    for file in sorted((DEMO / "units").glob("*.yaml")):
        text = file.read_text(encoding="utf-8")
        for copy, by_unit in enumerate(numbers):
            renumbered = _CHANNEL.sub(f"channel: C{copy} ", _renumbered(text, by_unit))
            renumbered = _CABINET.sub(f"C{copy} ", renumbered)
            (folder / "units" / f"{copy:04d}-{file.name}").write_text(renumbered, encoding="utf-8")


def _renumbered(text: str, by_unit: dict[str, str]) -> str:
    text = _TAG.sub(lambda match: f"{match[1]}{by_unit[match[2]]}{match[3]}", text)
    return _QUOTED_UNIT.sub(lambda match: f'"{by_unit[match[1]]}"', text)
