"""Many exports and kept slices -> one record of a loop, whatever the files were cut like.

``precedence`` decides which export holds where; ``stretches`` puts a loop's record together around
what is new and cuts the slices to keep; ``spans`` is the arithmetic of both.
"""
