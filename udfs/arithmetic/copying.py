"""Copies inside kernels."""

from typing import Any

import numpy.typing as npt

from midspread.udfs.declaring import compiled


@compiled
def copy_into(target: npt.NDArray[Any], source: npt.NDArray[Any]) -> None:
    """Copy all of a one-dimensional array.

    ``target[:] = source`` does the same and takes seconds to compile, for its checks of shapes.
    """
    for i in range(source.size):
        target[i] = source[i]
