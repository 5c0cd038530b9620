"""What a case builds round its loop, in percent of span, and what is to be said of it."""

from __future__ import annotations

from dataclasses import fields, replace

from workbench.case.case import Case
from workbench.errors import ModelError, NotApplicable
from workbench.model.cascade import scans_in
from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward, ideal_feedforward
from workbench.model.robustness import Margins, analogue_margins, sampled_margins
from workbench.model.sampled import SampledLoop
from workbench.model.structures import NOTHING, Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.delayed import sampled_steps, without_state_space
from workbench.units import Note, text, time_text


def built_round(case: Case, loop: Loop) -> Loop:
    """The loop with its compensation, feedforward and inner loop; itself where there is none.

    Raises `InputError` for a model that no controller can run.
    """
    if not (case.compensation.is_there or case.feedforward.is_there or case.inner.is_there):
        return loop
    span = case.op.range.span
    model = None
    if case.compensation.is_there:
        model = case.compensation.transfer() * (span / case.pv.range.span)
    feedforward = None
    if case.feedforward.is_there:
        found = case.feedforward.feedforward()
        # An upset at the plant's input is in percent of OP like OP; else it keeps its own unit.
        scale = 1.0 if case.plant.load_path() is None else 100.0 / span
        feedforward = replace(found, gain=found.gain * scale)
    parts = {field.name: getattr(loop, field.name) for field in fields(Loop)}
    inner = None
    if case.inner.is_there:
        inner = _inner(case, loop)
        if loop.load is loop.plant:
            # At the plant's input is at the inner PV, which the inner loop measures.
            inner = replace(inner, load=TransferFunction.constant(1.0))
            parts["load"] = NOTHING
    return Structure(
        **parts, model=model, feedforward=feedforward, inner=inner, inner_mode=case.inner.mode
    )


def _inner(case: Case, outer: Loop) -> Loop:
    """The inner loop; its PV is in percent of the OP span, its output of its own."""
    table = case.inner
    controller, span = table.controller(), table.range

    def limit(value: float | None) -> float | None:
        return None if value is None else span.percent(value - table.rest)

    return Loop(
        plant=table.transfer() * (span.span / case.op.range.span),
        load=NOTHING,
        gains=controller.gains(),
        reverse=controller.action != "direct",
        scan=controller.scan_s or outer.scan,
        low=limit(table.min),
        high=limit(table.max),
        rate=None if table.rate is None else span.percent(table.rate.per_second),
        windup=controller.windup,
    )


def has_one_scan(loop: Loop) -> bool:
    """The loop has one scan, and a plant that many can be judged of side by side as sampled."""
    nested = isinstance(loop, Structure) and loop.inner is not None
    return loop.scan is not None and not nested and not loop.plant.has_delayed_feedback


def margins_as_sampled(loop: Loop) -> tuple[Margins | None, str]:
    """Margins of a loop that has a scan, as sampled, or why it has none."""
    try:
        missing = _not_in_z(loop)
        if missing:
            return None, missing
        if not isinstance(loop, Structure) and loop.plant.has_delayed_feedback:
            return sampled_margins(loop, sampled_steps(loop)), ""
        return sampled_margins(loop), ""
    except ModelError as fault:
        return None, fault.problems[0].what


def open_loop_in_z(loop: Loop) -> tuple[SampledLoop | None, str]:
    """The open loop in z of a loop that has a scan, or why it has none."""
    try:
        missing = _not_in_z(loop)
        if missing:
            return None, missing
        if isinstance(loop, Structure):
            return loop.sampled(), ""
        if loop.plant.has_delayed_feedback:
            return sampled_steps(loop), ""
        return SampledLoop.of(loop), ""
    except ModelError as fault:
        return None, fault.problems[0].what


def _not_in_z(loop: Loop) -> str:
    """Why the open loop of a cascade is not had in z; nothing where it is."""
    if not isinstance(loop, Structure) or loop.inner is None:
        return ""
    if loop.inner_mode != "cascade":
        return f"the inner loop is in {loop.inner_mode}"
    assert loop.scan is not None
    assert loop.inner.scan is not None
    if scans_in(loop.scan, loop.inner.scan) is None:
        inner, outer = text(loop.inner.scan, "s"), text(loop.scan, "s")
        return f"the inner scan of {inner} does not go into the outer one of {outer}"
    if not sampled_margins(loop.inner).stable:
        return "the inner loop is not stable by itself, as sampled"
    return ""


def no_time_domain(plant: TransferFunction) -> str:
    """Why there can be no prediction; nothing where there can."""
    return without_state_space(plant)


# --- what is to be said --------------------------------------------------------------------------


def structure_notes(case: Case, loop: Loop) -> list[Note]:
    """What an engineer should know of compensation, feedforward and inner loop."""
    if not isinstance(loop, Structure):
        return []
    notes = []
    if loop.model is not None and loop.plant.integrators > 0:
        words = "with dead-time compensation an integrating plant does not come back after a load"
        notes.append(Note("caution", f"{words}: PV stays off its setpoint"))
    if loop.inner is not None:
        notes += _inner_notes(loop, loop.inner)
    if loop.feedforward is not None:
        notes += _feedforward_notes(case, loop, loop.feedforward)
    return notes


def _inner_notes(loop: Structure, inner: Loop) -> list[Note]:
    if loop.inner_mode != "cascade":
        words = f"the inner loop is in {loop.inner_mode}: the controller moves nothing"
        return [Note("caution", words)]
    known = margins_as_sampled(inner)[0] if inner.scan is not None else None
    margins = known or analogue_margins(replace(inner, scan=None))
    if not margins.stable:
        return [Note("caution", f"the inner loop is not stable by itself: {margins.reason}")]
    peak = text(margins.max_sensitivity.value, digits=3)
    return [Note("info", f"the inner loop by itself has Ms {peak}")]


def _feedforward_notes(case: Case, loop: Structure, given: Feedforward) -> list[Note]:
    """How the feedforward given compares with the ideal, and what of that cannot be realised."""
    plant, load = loop.acted_on, replace(loop, feedforward=None).upset
    try:
        ideal = ideal_feedforward(plant, load)
    except NotApplicable as refusal:
        return [Note("caution", f"feedforward: {refusal}")]
    best = ideal.feedforward
    scale = 1.0 if case.plant.load_path() is None else case.op.range.span / 100.0
    words = f"gain {text(best.gain * scale)}"
    for name, value in (("lead", best.lead), ("lag", best.lag), ("dead time", best.dead_time)):
        if value:
            words += f", {name} {time_text(value)}"
    said = "the ideal feedforward is" if ideal.exact else "the nearest to the ideal feedforward is"
    notes = [Note("info", f"{said} {words}")]
    notes += [Note("caution", f"feedforward cannot be ideal: {lost}") for lost in ideal.lost]
    if given.gain * best.gain < 0.0:
        notes.append(Note("caution", "the feedforward given drives PV further: turn its sign"))
    return notes
