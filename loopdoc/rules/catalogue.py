"""Every rule, registered by hand, family by family."""

from __future__ import annotations

from loopdoc.rules.action import (
    action_undecided,
    action_wrong,
    fail_position_signal_mismatch,
    fail_position_unsafe,
)
from loopdoc.rules.alarms import alarm_order, alarm_outside_range, alarm_time_short
from loopdoc.rules.document_control import hold_open
from loopdoc.rules.dynamics import (
    cascade_interval_order,
    cascade_no_benefit,
    cascade_too_slow,
    filter_too_slow,
    interval_too_slow,
    loop_unstable,
    margin_low,
    rate_on_flow,
    stroke_too_slow,
)
from loopdoc.rules.interlocks import interlock_too_slow, trip_before_alarm, trip_outside_range
from loopdoc.rules.pairing import mode_normal_conflict, pairing_cycle, pairing_two_primaries
from loopdoc.rules.ranges import (
    operating_outside_range,
    output_limit_outside_setpoint,
    range_reversed,
    secondary_range_short,
    secondary_range_wide,
    setpoint_limit_outside_range,
    split_range_gap,
    split_range_overlap,
)
from loopdoc.rules.rule import Rule
from loopdoc.rules.tags import reference_unknown, tag_duplicate, tag_grammar
from loopdoc.rules.text import schema
from loopdoc.rules.tuning import tuning_invalid
from loopdoc.rules.units import unit_incompatible

RULES: tuple[Rule, ...] = (
    # text
    schema,
    # tags and references
    tag_grammar,
    tag_duplicate,
    reference_unknown,
    # ranges
    range_reversed,
    unit_incompatible,
    secondary_range_short,
    secondary_range_wide,
    operating_outside_range,
    setpoint_limit_outside_range,
    output_limit_outside_setpoint,
    split_range_gap,
    split_range_overlap,
    # action and fail-safe
    action_wrong,
    action_undecided,
    fail_position_unsafe,
    fail_position_signal_mismatch,
    # pairing and modes
    pairing_cycle,
    pairing_two_primaries,
    mode_normal_conflict,
    # alarms
    alarm_order,
    alarm_outside_range,
    alarm_time_short,
    # interlocks
    trip_before_alarm,
    trip_outside_range,
    interlock_too_slow,
    # tuning and dynamics
    tuning_invalid,
    loop_unstable,
    margin_low,
    interval_too_slow,
    cascade_interval_order,
    cascade_too_slow,
    cascade_no_benefit,
    filter_too_slow,
    rate_on_flow,
    stroke_too_slow,
    # document control
    hold_open,
)

BY_ID = {rule.id: rule for rule in RULES}
