"""Where everything stands from left to right on a drawn loop: field, boxes and cabinets, control system, operator."""

from __future__ import annotations

from dataclasses import dataclass

WIDTH = 510.0
"""Of the drawing [pt]: the width between the margins of the page."""

# From the left edge of the field [pt].
FIELD, FIELD_NOTE = 30.0, 53.0

# From the left edge of the control system [pt].
_CHANNEL, _CONNECTOR, _ROOT, _TAP, _BLOCK, _FORCED = 26.0, 30.0, 59.0, 82.0, 100.0, 114.0
# From the left edge of the operator's station [pt].
_DISPLAY, _WORDS, _OTHERS = 21.0, 39.5, 66.0
# Right edge of the field, and widths of the first box's column, of each further one's and of the control system, by
# the number of columns [pt].
_SHARES = ((172.0, 0.0, 0.0, 132.0), (158.0, 40.0, 0.0, 124.0), (147.0, 40.0, 65.0, 120.0), (143.0, 36.0, 54.0, 118.0))


@dataclass(frozen=True, slots=True)
class Lanes:
    """Places across a drawing [pt], by how many boxes and cabinets stand on its way."""

    boxes: int
    field_right: float
    control: float
    """Left edge of the control system."""
    operator: float
    """Left edge of the operator's station."""

    @property
    def channel(self) -> float:
        """Middle of the channels."""
        return self.control + _CHANNEL

    @property
    def connector(self) -> float:
        """Middle of what names another sheet at the place of a channel."""
        return self.control + _CONNECTOR

    @property
    def root(self) -> float:
        """Middle of the square roots."""
        return self.control + _ROOT

    @property
    def tap(self) -> float:
        """Where a measurement is taken off to an interlock."""
        return self.control + _TAP

    @property
    def block(self) -> float:
        """Middle of the functions."""
        return self.control + _BLOCK

    @property
    def forced(self) -> float:
        """Where what an interlock does to the controller rises to it."""
        return self.control + _FORCED

    @property
    def display(self) -> float:
        """Middle of the controllers and indicators."""
        return self.operator + _DISPLAY

    @property
    def words(self) -> float:
        """Left edge of the words beside a controller."""
        return self.operator + _WORDS

    @property
    def others(self) -> float:
        """Middle of what names another sheet from the right."""
        return self.operator + _OTHERS

    @property
    def right(self) -> float:
        """Right edge of what may be drawn."""
        return WIDTH - 4

    @property
    def box_width(self) -> float:
        """Of a box or cabinet."""
        return 24.0 if self.boxes == len(_SHARES) - 1 else 26.0

    def box(self, column: int) -> float:
        """Middle of the boxes of a column."""
        _, first, further, _ = _SHARES[self.boxes]
        return self.field_right + first + further * column - self.box_width / 2 - (5.0 if self.boxes < 3 else 4.0)

    @property
    def heads(self) -> tuple[tuple[str, float, float], ...]:
        """Name, left and right edge of each lane; no lane of boxes where there are none."""
        # A single box may be either; the register does not say which.
        boxes = "Terminals" if self.boxes == 1 else "Junction box and marshalling"
        return (
            ("Field", 0.5, self.field_right),
            *(((boxes, self.field_right, self.control),) if self.boxes else ()),
            ("Control system", self.control, self.operator),
            ("Operator's station", self.operator, WIDTH - 0.5),
        )


def lanes_of(boxes: int) -> Lanes:
    """The lanes of a drawing with this many columns of boxes and cabinets, three at most."""
    field_right, first, further, control = _SHARES[boxes]
    left = field_right + (first + further * (boxes - 1) if boxes else 0.0)
    return Lanes(boxes, field_right, left, left + control)
