"""What the store knows that the sentences on the feed need: read, nothing decided.

In: a store and what the list is about. Out: ``feed.Facts``, for ``feed.quiet``.
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, datetime, timedelta

from audit.feed import DAYS, REACTIONS, Facts
from audit.records import ExportSource, Loop, Quantity, instant, to_us
from audit.store import Store, queries
from audit.store.newest import newest_measured


def feed_facts(
    store: Store,
    loops: Sequence[Loop],
    exports: Sequence[ExportSource],
    asked: datetime,
    night: date,
) -> Facts:
    """The facts on the feed of some loops, asked at a time about the list of a night.

    ``exports``: the site's ``[[exports]]``; without them each tag is read by the defaults.
    """
    tags = [loop.tag for loop in loops]
    with store.read() as session:
        newest_us = queries.newest_stamp(session, to_us(asked))
        return Facts(
            loops=loops,
            named=queries.tag_sources(session),
            newest=None if newest_us is None else instant(newest_us),
            asked=asked,
            night=night,
            days=queries.day_records_many(session, tags, night - timedelta(days=DAYS), night),
            states=queries.tag_states(session),
            reactions=newest_measured(
                session, tags, Quantity.OUTPUT_REACTION, to_us(asked), REACTIONS
            ),
            exports=exports,
        )
