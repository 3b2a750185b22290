"""What each tag of a loop last said: its newest good sample, and since when its value holds.

In: fresh samples and the states known before them. Out: the states after them. From these the feed
tells a tag gone flat or silent, whatever pieces the record came in.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from audit.records import Role, Samples, TagState


def follow(samples: Samples, before: TagState | None) -> TagState | None:
    """The state of a tag after fresh samples; None while it has given no good one.

    Samples that all lie before the newest one known change nothing. Pieces of one record, given in
    its order, overlapping or not, lead to the state of the whole. Of a value that comes again in
    place of what was known the later start counts, so that nothing is called flat too early.
    """
    good = samples.only_good()
    if len(good) == 0:
        return before
    newest_us, value = int(good.t_us[-1]), float(good.value[-1])
    if before is not None and newest_us < before.newest_us:
        return before
    others = np.flatnonzero(good.value != value)
    since_us = int(good.t_us[int(others[-1]) + 1 if len(others) else 0])
    if before is not None and before.value == value:
        known_us = before.held_since_us
        since_us = max(since_us, known_us) if len(others) else known_us
    return TagState(newest_us, value, since_us)


def follow_all(
    fresh: Mapping[Role, Samples], before: Mapping[Role, TagState]
) -> dict[Role, TagState]:
    """The states of a loop's tags that fresh samples changed, by role."""
    after = {role: follow(samples, before.get(role)) for role, samples in fresh.items()}
    return {
        role: state
        for role, state in after.items()
        if state is not None and state != before.get(role)
    }
