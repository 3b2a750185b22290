"""The ranked list of one night, as the contract's JSON."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date

from audit import feed
from audit.errors import AuditError
from audit.feed_facts import feed_facts
from audit.records import Loop, Standing, to_us
from audit.reports import contract, words
from audit.reports.contract import Json
from audit.site import Site
from audit.store import Store, queries


def ranking(
    store: Store, site: Site, night: date | None = None, as_published: bool = False
) -> Json:
    """The ranked list of ``night`` (None: the newest), every loop of that night's register in it.

    The newest revision of the night, or with ``as_published`` its first. Beyond the contract's
    keys: how far the data went, what was refused, the parts of the order, and the cautions.
    Raises AuditError where there is no list of that night.
    """
    store.require_current()
    with store.read() as session:
        found = queries.standings(session, night, first=as_published)
        if found is None:
            known = [info.night for info in queries.nights(session)]
            raise _no_list(night, known)
        info, standings = found
        loops = {row.loop.tag: row.loop for row in queries.loops(session, include_retired=True)}
        refused = [seen for seen in queries.exports(session) if seen.state == "refused"]
        asked = min(info.computed_at, info.cutoff)
        newest_us = queries.newest_stamp(session, to_us(asked))
    listed = [loops[row.tag] for row in standings if row.tag in loops]
    quiet = feed.sentences(feed_facts(store, listed, site.config.exports, asked, info.night))
    return {
        "night": info.night.isoformat(),
        "site": site.config.name,
        "timezone": str(site.config.timezone),
        "cutoff": contract.stamp(info.cutoff),
        "revision": info.revision,
        "revisions": info.revisions,
        "computed_at": contract.stamp(info.computed_at),
        "newest_stamp": contract.stamp(newest_us),
        "quiet": list(quiet),
        "refused_exports": [{"path": seen.path, "reason": seen.reason} for seen in refused],
        "loops": [
            _row(rank, standing, loops.get(standing.tag))
            for rank, standing in enumerate(standings, start=1)
        ],
        "cautions": list(words.CAUTIONS),
    }


def _row(rank: int, standing: Standing, loop: Loop | None) -> Json:
    """One loop's place in the list."""
    return {
        "rank": rank,
        "tag": standing.tag,
        "process_unit": loop.process_unit if loop else "",
        "service": loop.service if loop else "",
        "eu": loop.eu if loop else "",
    } | contract.standing(standing)


def _no_list(night: date | None, known: Sequence[date]) -> AuditError:
    if not known:
        return AuditError("no night has been audited yet", "run `loopassay nightly`")
    span = f"{min(known).isoformat()} to {max(known).isoformat()}"
    asked = night.isoformat() if night else "that"
    return AuditError(
        f"there is no list of the night {asked}",
        f"{len(known)} nights are there, {span}; `loopassay nightly --from … --to …` makes others",
    )
