"""English: what the values of a document are called, and where they come from."""

from __future__ import annotations

from collections.abc import Sequence

from loopdoc.documents.language.english.sheet import EnglishSheet

_NAMES = {
    ("controller", "modes", "normal"): "normal mode",
    ("controller", "on_bad_measurement", "mode"): "mode at a bad measurement",
    ("controller", "on_bad_measurement", "output"): "output at a bad measurement",
    ("operating", "low"): "low end of normal operation",
    ("operating", "normal"): "value in normal operation",
    ("operating", "high"): "high end of normal operation",
    ("controller", "setpoint", "low"): "low setpoint limit",
    ("controller", "setpoint", "normal"): "normal setpoint",
    ("controller", "setpoint", "high"): "high setpoint limit",
    ("controller", "output", "low"): "low output limit",
    ("controller", "output", "high"): "high output limit",
    ("controller", "output", "span"): "output span",
    ("process", "source"): "source of the process model",
    ("bypass", "permitted"): "bypass",
    ("bypass", "limit"): "limit of a bypass",
    ("normal",): "normal ratio",
}
_LISTED = {"start_up": "start-up, step", "shut_down": "shutdown, step", "upsets": "upset", "lags": "lag"}


class EnglishSources(EnglishSheet):
    """Words of the appendix of sources, and of what is calculated."""

    def origin_name(self, path: Sequence[str | int]) -> str:
        """What a value is, by where it stands under its tag: `high alarm limit`, `trip limit of PT-2021A`."""
        steps = tuple(str(step) for step in path)
        if steps in _NAMES:
            return _NAMES[steps]
        match steps:
            case ("controller", "modes", "permitted", *_):
                return "permitted mode"
            case ("initiators", tag, "trips"):
                return f"trip limit of {tag}"
            case ("initiators", tag, "delay"):
                return f"trip delay of {tag}"
            case ("actions", tag, *rest):
                return f"{rest[0] if rest else 'position'} of {tag} on a trip"
            case ("outputs", tag):
                return f"output range of {tag}"
            case ("weights", tag):
                return f"weight of {tag}"
            case ((*above, name, at)) if name in _LISTED and at.isdecimal():
                of = f" of {above[-1]}" if "branches" in above else ""
                return f"{_LISTED[name]} {int(at) + 1}{of}"
            case ("deviations", name):
                return f"deviation, {name.replace('_', ' ')}"
        return self.held_name(path)

    def sources_intro(self, fingerprint: str) -> str:
        """What stands above the appendix of sources."""
        return (
            "Every value that this document states, in the order of the tags. File and line are those of the register "
            f"with the fingerprint {fingerprint}, which the PDF encloses; a calculated value names its calculation."
        )

    def source_note(self, what: str, tag: str, where: str) -> str:
        """What a pointer resting on a value tells: what it is, of which tag, and where it comes from."""
        return f"{what}{f', {tag}' if tag else ''}: {where}"

    def by_frequency_response(self) -> str:
        """By what margins are calculated."""
        return "calculated, frequency response of the process models"

    def by_simulation(self) -> str:
        """By what responses are calculated."""
        return "calculated, time response of the process models"

    def by_time_to_act(self) -> str:
        """By what the time from an alarm to a trip is calculated."""
        return "calculated, process models from normal operation with the loops in manual"

    def by_the_two_times(self) -> str:
        """By what the share of the process safety time is calculated."""
        return "calculated, response time over process safety time"

    def by_standard_upset(self) -> str:
        """From what the size of a standard upset comes."""
        return "calculated, a tenth of the span"

    def by_setpoint_limit(self) -> str:
        """From what the size of a setpoint step comes that its limit cuts short."""
        return "calculated, from the normal setpoint to its limit"

    def by_sized_upset(self) -> str:
        """From what the size of an upset comes that is to bring another controller or final element in."""
        return "calculated, so that another controller or final element takes over"

    def by_check(self, rule: str) -> str:
        """Which rule of the check gives a value."""
        return f"check of the register, rule {rule}"
