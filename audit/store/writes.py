"""All that is written to the store, each a function that takes the ``Session`` of a transaction."""

from audit.store.enter import enter_register, enter_site
from audit.store.entries import RegisterChanges, SavedLoop
from audit.store.intake import begin_export, finish_exports, refuse_export
from audit.store.loop_rows import LoopRows, rows_of
from audit.store.publish import end_run, save_night, start_run
from audit.store.save import save_loop, save_rows

__all__ = [
    "LoopRows",
    "RegisterChanges",
    "SavedLoop",
    "begin_export",
    "end_run",
    "enter_register",
    "enter_site",
    "finish_exports",
    "refuse_export",
    "rows_of",
    "save_loop",
    "save_night",
    "save_rows",
    "start_run",
]
