"""Where a read of the rows runs: in threads of this process, or in worker processes. Both give the same bits.

An engine takes a table and measures of the core and returns the measures filled, one read for any number of them.
Fitting knows nothing else about where rows come from and who computes.
"""

from drumlin.engines.budget import Work
from drumlin.engines.engine import Engine, ReadingPlan, open_engine
from drumlin.engines.pickling import measure_from_bytes
from drumlin.engines.progress import Reporter

__all__ = ["Engine", "ReadingPlan", "Reporter", "Work", "measure_from_bytes", "open_engine"]
