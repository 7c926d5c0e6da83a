"""Every rule, registered by hand, family by family."""

from __future__ import annotations

from loopdoc.rules.action import (
    action_undecided,
    action_wrong,
    fail_position_signal_mismatch,
    fail_position_unsafe,
    split_range_direction,
)
from loopdoc.rules.alarm_design import (
    alarm_deadband,
    alarm_delay_long,
    alarm_duplicate,
    alarm_missing_for_hazard,
    alarm_priority_mix,
    alarm_priority_order,
    alarm_unrationalised,
)
from loopdoc.rules.alarms import alarm_inside_operating, alarm_order, alarm_outside_range, alarm_time_short
from loopdoc.rules.channels import channel_duplicate, channel_signal_mismatch
from loopdoc.rules.deviations import deviation_ambiguous, deviation_expired, deviation_unapproved, deviation_unused
from loopdoc.rules.document_control import (
    approval_missing,
    check_not_independent,
    drawing_missing,
    history_disordered,
    history_missing,
    hold_open,
)
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
from loopdoc.rules.fail_safe import measurement_fault_unsafe
from loopdoc.rules.feedforward import disturbance_not_fed_forward
from loopdoc.rules.functions import (
    characteriser_not_monotonic,
    characteriser_short,
    function_incomplete,
    ratio_range_short,
    selector_direction,
    selector_span_mismatch,
    split_range_gap,
    split_range_overlap,
)
from loopdoc.rules.identification import tag_function_mismatch, tag_variable_mismatch
from loopdoc.rules.interlock_actions import (
    interlock_action_unsafe,
    interlock_actions_conflict,
    interlock_loop_not_forced,
    trip_output_mismatch,
)
from loopdoc.rules.interlocks import (
    interlock_limits_differ,
    interlock_too_slow,
    interlock_voting,
    setpoint_limit_beyond_trip,
    trip_before_alarm,
    trip_fault_blind,
    trip_inside_operating,
    trip_outside_range,
    trip_without_alarm,
)
from loopdoc.rules.modes import (
    bad_measurement_undefined,
    fallback_outside_output_limits,
    mode_normal_conflict,
    mode_not_permitted,
    selector_tracking_missing,
    tracking_missing,
)
from loopdoc.rules.pairing import (
    final_element_unmoved,
    pairing_cycle,
    pairing_two_primaries,
    pairing_without_controller,
)
from loopdoc.rules.ranges import (
    operating_outside_range,
    operating_poor_resolution,
    output_limit_outside_setpoint,
    range_reversed,
    secondary_range_short,
    secondary_range_wide,
    setpoint_limit_outside_range,
)
from loopdoc.rules.rule import Rule
from loopdoc.rules.safety_layers import (
    interlock_bypass_unlimited,
    interlock_proof_test_missing,
    interlock_reset_missing,
    interlock_shared_final_element,
    interlock_shared_sensor,
)
from loopdoc.rules.tags import reference_unknown, tag_duplicate, tag_grammar
from loopdoc.rules.text import schema, text_tag_unknown
from loopdoc.rules.tuning import tuning_invalid
from loopdoc.rules.units import unit_incompatible
from loopdoc.rules.wiring import cable_ends_differ, cable_pair_duplicate, terminal_duplicate

RULES: tuple[Rule, ...] = (
    # text
    schema,
    # tags and references
    tag_grammar,
    tag_duplicate,
    tag_variable_mismatch,
    tag_function_mismatch,
    reference_unknown,
    text_tag_unknown,
    channel_duplicate,
    channel_signal_mismatch,
    # wiring
    terminal_duplicate,
    cable_pair_duplicate,
    cable_ends_differ,
    # ranges
    range_reversed,
    unit_incompatible,
    secondary_range_short,
    secondary_range_wide,
    operating_outside_range,
    operating_poor_resolution,
    setpoint_limit_outside_range,
    output_limit_outside_setpoint,
    ratio_range_short,
    selector_span_mismatch,
    selector_direction,
    characteriser_not_monotonic,
    characteriser_short,
    split_range_gap,
    split_range_overlap,
    # action and fail-safe
    action_wrong,
    action_undecided,
    fail_position_unsafe,
    fail_position_signal_mismatch,
    split_range_direction,
    measurement_fault_unsafe,
    trip_output_mismatch,
    # pairing and modes
    pairing_cycle,
    pairing_two_primaries,
    pairing_without_controller,
    function_incomplete,
    disturbance_not_fed_forward,
    final_element_unmoved,
    mode_normal_conflict,
    mode_not_permitted,
    bad_measurement_undefined,
    fallback_outside_output_limits,
    tracking_missing,
    selector_tracking_missing,
    # alarms
    alarm_order,
    alarm_outside_range,
    alarm_inside_operating,
    alarm_deadband,
    alarm_delay_long,
    alarm_unrationalised,
    alarm_priority_order,
    alarm_priority_mix,
    alarm_missing_for_hazard,
    alarm_duplicate,
    alarm_time_short,
    # interlocks
    trip_without_alarm,
    trip_before_alarm,
    trip_outside_range,
    trip_inside_operating,
    setpoint_limit_beyond_trip,
    trip_fault_blind,
    interlock_voting,
    interlock_limits_differ,
    interlock_action_unsafe,
    interlock_actions_conflict,
    interlock_loop_not_forced,
    interlock_shared_sensor,
    interlock_shared_final_element,
    interlock_proof_test_missing,
    interlock_reset_missing,
    interlock_bypass_unlimited,
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
    approval_missing,
    check_not_independent,
    history_missing,
    history_disordered,
    drawing_missing,
    deviation_expired,
    deviation_unapproved,
    deviation_ambiguous,
    deviation_unused,
)
