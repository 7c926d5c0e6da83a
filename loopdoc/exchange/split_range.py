"""The responses of a split range as a whole, as text and as JSON."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from loopdoc.engineering.branched_simulation import BranchedResponse
from loopdoc.engineering.comparison import UPSET_PCT, NotSimulated, peak_time_s
from loopdoc.engineering.dynamics import inputs_beside
from loopdoc.engineering.split_range import HANDOVER, SplitRange
from loopdoc.engineering.stages import measured_range
from loopdoc.exchange.response_metrics import metric_cells, metric_heads, metrics_object, shown
from loopdoc.exchange.tuning_review import number
from loopdoc.register.units import difference_unit


def split_object(split: SplitRange | NotSimulated) -> dict[str, Any]:
    """A split range across its handover: start, worst branch, and by upset the metrics and every opening."""
    if isinstance(split, NotSimulated):
        return {"not_simulated": split.reason}
    own = measured_range(split.lead)
    return {
        "function": split.function.tag,
        "start_output_pct": number(split.structure.output_pct),
        "start_declared": split.is_declared,
        "handover_output_pct": number(split.handover_pct),
        "worst_branch": split.worst.chain.final_element.tag,
        "unit": own.unit.symbol,
        "scenarios": {
            response.scenario.name: {
                "metrics": metrics_object(response.metrics, own),
                "crosses_handover": split.crosses(response),
                "openings_pct": {
                    element.tag: {
                        "start": number(start), "end": number(float(travel[-1])),
                        "low": number(low), "high": number(high),
                    }
                    for element, start, travel, (low, high) in zip(
                        split.elements, split.structure.openings_pct, response.travel_pct, response.travel_range_pct,
                        strict=True,
                    )
                },
            }
            for response in split.responses
        },
    }  # fmt: skip


def split_lines(split: SplitRange | NotSimulated) -> Iterator[str]:
    """The same for reading."""
    if isinstance(split, NotSimulated):
        yield f"the split range as a whole: no time responses: {split.reason}"
        return
    path = " > ".join([level.loop.tag for level in reversed(split.chains[0].chain.levels)] + [split.function.tag])
    yield f"{path} > {' and '.join(element.tag for element in split.elements)}, across the handover"
    yield _start(split)
    worst = split.worst
    yield (
        f"margins hold branch by branch, as above; the worst is that with {worst.chain.final_element.tag}, "
        f"Ms {shown(worst.margins[-1].max_sensitivity)}"
    )
    own = measured_range(split.lead)
    width = max(24, *(len(response.scenario.name) + 2 for response in split.responses))
    yield ""
    yield f"{'upset':{width}}{metric_heads(difference_unit(own.unit).symbol)}"
    for response in split.responses:
        peak_s = peak_time_s(response.scenario.setpoint_step_pct, response.metrics)
        yield f"{response.scenario.name:{width}}{metric_cells(response.metrics, own, peak_s)}"
    yield f"{'openings, %':{width}}{'':12}{'start':>8}{'end':>8}{'lowest':>8}{'highest':>8}"
    for response in split.responses:
        yield from _openings(split, response, width)
    if not any(split.crosses(response) for response in split.responses):
        yield f"none of these carries the output over the handover at {shown(split.handover_pct)} %"
    for tag, function in inputs_beside(split.chains):
        yield f"{tag} into {function}: stays as it is in these responses"
    yield "valve travel and reversals: of all final elements together; each opening by its own linear process model"
    for response in split.responses:
        if response.scenario.name == HANDOVER:
            size = shown(response.scenario.disturbances[0].size_pct)
            yield f"{HANDOVER}: the same upset at that measurement with {size} % in place of {shown(UPSET_PCT)} %"


def _start(split: SplitRange) -> str:
    standing = " and ".join(
        f"{element.tag} at {shown(round(opening, 2) + 0.0)} %"
        for element, opening in zip(split.elements, split.structure.openings_pct, strict=True)
    )
    told = f"start: {standing}, the output at {shown(split.structure.output_pct)} %"
    if split.is_declared:
        return f"{told}, by the normal input of {split.function.tag}; handover at {shown(split.handover_pct)} %"
    return (
        f"{told}, chosen so that the upset at the measurement crosses the handover at "
        f"{shown(split.handover_pct)} %, since the register gives no `normal_input` of {split.function.tag}"
    )


def _openings(split: SplitRange, response: BranchedResponse, width: int) -> Iterator[str]:
    name = response.scenario.name
    for element, start, travel, (low, high) in zip(
        split.elements, split.structure.openings_pct, response.travel_pct, response.travel_range_pct, strict=True
    ):
        figures = (start, float(travel[-1]), low, high)
        cells = "".join(f"{shown(round(figure, 2) + 0.0):>8}" for figure in figures)
        took_over = element is split.elements[split.far] and split.crosses(response)
        yield f"{name:{width}}{element.tag:12}{cells}{'   beyond the handover' if took_over else ''}"
        name = ""
