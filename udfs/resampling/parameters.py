"""Parameters that the resampling functions share; seed and statistic stand beside their code."""

from typing import Final

from midspread.udfs.parameters import Parameter
from midspread.udfs.resampling.intervals import METHODS

CONFIDENCE: Final = Parameter(
    "confidence",
    "how often the interval is to cover, 0.95 for 95 %",
    default=0.95,
    low=0.0,
    high=1.0,
    low_open=True,
    high_open=True,
)
METHOD: Final = Parameter(
    "method", "how draws become limits", "'bca'", kind="text", choices=METHODS
)
RESAMPLES: Final = Parameter(
    "resamples", "how many samples are drawn", default=2000, low=1, high=1e6, whole=True
)
