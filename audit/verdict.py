"""One response and the spec in force at it in; a verdict for each limited quantity out.

The rule is guarded on both sides: a value is in spec only if its whole 95 % interval keeps the
limit, out of spec only if none of it does. More uncertainty can only make a verdict undecided.
"""

from __future__ import annotations

from audit.evidence import PEAK_BOUND, SIGNED, decide
from audit.records import (
    LIMITED,
    ChangeKind,
    Loop,
    Measured,
    Outcome,
    Quantity,
    Reason,
    Response,
    SetpointChange,
    Spec,
    Verdict,
)

__all__ = ["decide", "judge"]


def judge(
    response: Response, change: SetpointChange, spec: Spec | None, loop: Loop
) -> tuple[dict[Quantity, Verdict], bool, tuple[Reason, ...]]:
    """The verdicts on a change, whether it is usable, and if not, the codes of why not.

    Only quantities with a limit have a verdict. A change is usable if at least one of them has a
    value, a bound, or an answer without a number (no peak, no response); without any limit in
    force, if one of those a spec could limit has. A secondary controller's moving setpoint has no
    verdicts.
    """
    limits = {} if spec is None else spec.limits
    looked_at = tuple(quantity for quantity in LIMITED if quantity in limits) or LIMITED
    whys = _whys(response, change, looked_at)
    spoiled = bool(change.set_aside) or change.kind is ChangeKind.MOVING
    usable = not spoiled and any(
        _tells(response.measured.get(quantity), quantity) for quantity in looked_at
    )
    verdicts = {}
    if spec is not None and change.kind is not ChangeKind.MOVING:
        for quantity in looked_at:
            if quantity in limits:
                measured = _counted(response, change, quantity)
                outcome, why = _outcome(measured, quantity, limits[quantity], loop)
                verdicts[quantity] = Verdict(
                    limits[quantity], outcome, spec.valid_from, spec.version, why
                )
    return verdicts, usable, () if usable else whys


def _counted(response: Response, change: SetpointChange, quantity: Quantity) -> Measured:
    """What counts of a quantity: nothing, where the whole change is set aside."""
    if change.set_aside:
        return Measured.missing(change.set_aside[0])
    return response.measured.get(quantity, Measured.missing(Reason.NEEDS_MODEL))


def _outcome(
    measured: Measured, quantity: Quantity, limit: float, loop: Loop
) -> tuple[Outcome, Reason | None]:
    signed = quantity in SIGNED
    if loop.averaging and not signed:
        return Outcome.NOT_APPLICABLE, Reason.AVERAGING
    if not measured.known and measured.why is Reason.NO_PEAK and quantity in PEAK_BOUND:
        return Outcome.NOT_APPLICABLE, Reason.NO_PEAK
    return decide(measured, limit, signed), measured.why


def _tells(measured: Measured | None, quantity: Quantity) -> bool:
    """Whether a quantity of a change is evidence: a number, a bound, no peak, no response."""
    if measured is None:
        return False
    if measured.known or measured.why is Reason.NO_RESPONSE:
        return True
    return quantity in PEAK_BOUND and measured.why is Reason.NO_PEAK


def _whys(
    response: Response, change: SetpointChange, looked_at: tuple[Quantity, ...]
) -> tuple[Reason, ...]:
    """Why a change is not usable, each code once: what spoils it whole, else by quantity."""
    if change.set_aside:
        return tuple(dict.fromkeys(change.set_aside))
    measured = (response.measured.get(quantity) for quantity in looked_at)
    whys = (None if one is None else one.why for one in measured)
    return tuple(dict.fromkeys(why or Reason.NEEDS_MODEL for why in whys))
