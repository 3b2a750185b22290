"""A loop's record comes in, its setpoint changes go out, each with its window and reasons.

``moves`` finds where the held setpoint changes beyond its noise, ``following`` tells whether the
controller followed it, ``changes`` groups the moves and cuts the windows.

What is found at an instant t0 rests on nothing but the good samples within
[t0 - before - join, t0 + after + join] and, of each tag, the last good one before and the first
good one after: however a record is cut into files, the same changes come out, to the last digit.
"""

from audit.setpoints.changes import find

__all__ = ["find"]
