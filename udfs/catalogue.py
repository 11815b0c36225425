"""The catalogue: every function, found by importing the modules of each family."""

import functools
import importlib
import pkgutil
from collections.abc import Collection, Mapping
from types import MappingProxyType

from midspread.udfs.declaring import Function, declared

_FAMILIES = (
    "location",
    "scale",
    "shape",
    "association",
    "reexpression",
    "comparison",
    "resampling",
    "sensitivity",
    "tables",
)


@functools.cache
def functions() -> Mapping[str, Function]:
    """Every function of the catalogue by name, in the order of families and files.

    Cheap to call: nothing is compiled and no numerical library beyond numpy is imported.
    """
    for family in _FAMILIES:
        package = importlib.import_module(f"midspread.udfs.{family}")
        for module in pkgutil.iter_modules(package.__path__):
            importlib.import_module(f"{package.__name__}.{module.name}")
    return MappingProxyType(declared())


def needed_by(names: Collection[str]) -> frozenset[str]:
    """The functions to register so that those of some names work.

    Table functions are written in terms of others, so that one of them needs all.
    """
    known = functions()
    return frozenset(known if any(known[name].kind == "table" for name in names) else names)
