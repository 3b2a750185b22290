"""Loopassay: which control loops no longer do what they were commissioned to do.

export file -> exports -> samples                 (one file a format; UTC; every cell accounted for)
samples -> weaving, quality -> a loop's record    (whatever the files were cut like)
record -> setpoints -> setpoint changes           (step, staircase, ramp; usable or set aside)
change -> response -> measurements                (value and 95 % interval, or the reason why not)
measurements -> verdict -> outcomes               (against the spec in force at the change)
history -> trend -> change against the baseline   (beyond chance, and large enough to matter)
outcomes, trend -> ranking -> the ranked list     (every loop of the register is in it)
nightly strings these together; store keeps; reports reads; cli prints. Start in nightly.py.
"""

__version__ = "0.1.0"
