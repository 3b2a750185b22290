"""The read side: what the store knows, in the shapes of the contract.

The one source for the command line, for JSON and for whatever shows results later. In: a store and
a site. Out: plain dicts that ``json.dumps`` can write.
"""

from audit.reports.loop_history import history
from audit.reports.ranked_list import ranking
from audit.reports.store_status import status

__all__ = ["history", "ranking", "status"]
