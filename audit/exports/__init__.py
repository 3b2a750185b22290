"""Historian exports: files come in, samples in UTC and the account of every cell go out.

files (where they lie, bytes) -> csv_file | parquet_file (a sheet of columns) -> clock, zones
(stamps), codes (quality), cells (values) -> layouts (wide or narrow, samples) -> intake.
"""

from audit.exports.files import discover, same_file
from audit.exports.intake import Peek, first_stamp, named, peek, read

__all__ = ["Peek", "discover", "first_stamp", "named", "peek", "read", "same_file"]
