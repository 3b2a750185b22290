"""The store: all that an audit keeps, on SQLite or PostgreSQL.

``session`` opens it and hands out transactions, ``writes`` and ``queries`` are what is done in
them, ``dump`` gives its canonical content. Only this package knows SQL.
"""

from audit.store.entries import Lease
from audit.store.session import Store, backup, open_store, take_lease

__all__ = ["Lease", "Store", "backup", "open_store", "take_lease"]
