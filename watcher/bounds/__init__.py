"""The statistics of the promise: numpy and scipy only, no I/O, no clock, no log.

`METHOD` is raised whenever a formula changes in a way that could change a recorded verdict.
"""

from typing import Final

METHOD: Final = 1
