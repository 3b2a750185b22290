"""Tags gone flat, and tags gone silent, while the feed goes on.

In: ``Facts``. Out: sentences. A setpoint and a mode hold by nature, so does the output of a loop in
manual or at its limit; a loop not in automatic says so in its own place.
"""

from __future__ import annotations

from dataclasses import dataclass

from audit import figures
from audit.feed.facts import ROLE, Facts, counted, hours, listed, when
from audit.records import Between, Loop, Role, TagState, to_us

HOUR_US = 3_600_000_000
FLAT_US = 24 * HOUR_US
"""One and the same value to the last digit for so long is no measurement (common practice, no
source) …"""
FLAT_HELD_US = 72 * HOUR_US
"""… and for so long where only changes are reported: there silence is a value."""
SILENT_US = 24 * HOUR_US
"""No good sample for so long, beyond the silence the site declared for the tag (common practice,
no source)."""
FLAT_ARCHIVE_SHARE = 0.5
FLAT_ARCHIVE_LEAST = 3
"""So many process variables flat, and this share of those looked at: it is the archive (common
practice, no source)."""


@dataclass(frozen=True)
class _Held:
    """A tag of a loop whose value has not moved from one instant to another."""

    loop: Loop
    role: Role
    state: TagState
    from_us: int
    to_us: int

    @property
    def text(self) -> str:
        unit = self.loop.eu if self.role is Role.PV else "%"
        value = figures.with_unit(figures.plain(self.state.value), unit)
        held = hours(self.to_us - self.from_us)
        return f"{self.loop.tag} ({value} for {held}, since {when(self.from_us)})"


def flat(facts: Facts) -> list[str]:
    """Sentences on process variables and controller outputs that do not move."""
    looked_at = [held for loop in facts.loops if (held := _held(facts, loop, Role.PV))]
    stuck = [held for held in looked_at if _is_flat(facts, held)]
    known = {held.loop.tag for held in stuck}
    outputs = [
        held
        for loop in facts.loops
        if loop.tag not in known and (held := _held(facts, loop, Role.OUTPUT))
        if _is_flat(facts, held) and not _at_limit(held) and _held(facts, loop, Role.PV)
    ]
    sentences = [_flat_sentence(stuck, len(looked_at))] if stuck else []
    if outputs:
        texts = [held.text for held in outputs]
        sentences.append(
            f"The controller output of {counted(texts)} in automatic keeps one and the same value "
            f"to the last digit while the process variable moves: {listed(texts)}. Is the tag "
            "stuck, or the controller not at work?"
        )
    return sentences


def _flat_sentence(stuck: list[_Held], looked_at: int) -> str:
    texts = [held.text for held in stuck]
    if len(stuck) >= max(FLAT_ARCHIVE_LEAST, FLAT_ARCHIVE_SHARE * looked_at):
        return (
            f"The archive looks flat: the process variables of {len(stuck)} of {looked_at} loops "
            "keep one and the same value to the last digit. Does the historian repeat its last "
            f"values, or is the plant at rest? {listed(texts)}."
        )
    return (
        f"One and the same value to the last digit though samples keep coming, a stuck sensor? "
        f"The process variable of {counted(texts)}: {listed(texts)}."
    )


def _held(facts: Facts, loop: Loop, role: Role) -> _Held | None:
    """How long a tag's value holds, in automatic; None: not known, parked, or gone silent.

    Asked about an earlier time than the tag's newest sample, only the part before it counts.
    """
    states = facts.states.get(loop.tag, {})
    state = states.get(role)
    if state is None or facts.newest is None:
        return None
    if _silent_us(facts, loop, role, state) is not None:
        return None
    from_us, upto_us = state.held_since_us, min(state.newest_us, facts.until_us)
    mode = states.get(Role.MODE) if loop.mode else None
    if mode is not None and mode.held_since_us <= facts.until_us:
        if mode.value == 0.0:
            return None
        from_us = max(from_us, mode.held_since_us)
    return _Held(loop, role, state, from_us, upto_us)


def _is_flat(facts: Facts, held: _Held) -> bool:
    reading = facts.reading(held.loop.tags()[held.role])
    between = reading.pv_between if held.role is Role.PV else reading.output_between
    least = FLAT_HELD_US if between is Between.HOLD else FLAT_US
    return held.to_us - held.from_us >= least


def _at_limit(held: _Held) -> bool:
    low, high = held.loop.output_limits
    return not low < held.state.value < high


def silent(facts: Facts) -> list[str]:
    """A sentence on tags whose newest good sample is old while the feed goes on."""
    items = []
    for loop in facts.loops:
        parts = [
            f"{ROLE[role]}, {hours(age_us)}, {when(state.newest_us)}"
            for role, state, age_us in _silent_tags(facts, loop)
        ]
        if parts:
            items.append(f"{loop.tag} ({'; '.join(parts)})")
    if not items:
        return []
    return [
        "No good sample any more, though others keep coming, from tags of "
        f"{counted(items)} (for how long, newest good sample): {listed(items)}. Has the tag got "
        "another name, or has its transmitter failed?"
    ]


def without_pv(facts: Facts) -> list[str]:
    """Loops whose process variable has gone silent."""
    return [
        loop.tag
        for loop in facts.loops
        if any(role is Role.PV for role, _, _ in _silent_tags(facts, loop))
    ]


def _silent_tags(facts: Facts, loop: Loop) -> list[tuple[Role, TagState, int]]:
    """The tags of a loop that have gone silent, each with how long, microseconds."""
    states = facts.states.get(loop.tag, {})
    ages = [
        (role, states[role], _silent_us(facts, loop, role, states[role]))
        for role in loop.tags()
        if role in states
    ]
    return [(role, state, age_us) for role, state, age_us in ages if age_us is not None]


def _silent_us(facts: Facts, loop: Loop, role: Role, state: TagState) -> int | None:
    """How much older a tag's newest good sample is than the feed's; None: not too much."""
    if facts.newest is None:
        return None
    age_us = to_us(facts.newest) - state.newest_us
    allowed = facts.reading(loop.tags()[role]).silence_us.get(role, 0)
    return age_us if age_us > SILENT_US + allowed else None
