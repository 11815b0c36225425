"""Kernels of one long group look for the request to stop, again and again."""

from typing import Any

import numpy as np
import pytest

from midspread.udfs.declaring import NULL
from midspread.udfs.reexpression import ladder_figures, straightening

POWERS = np.array([-1.0, 0.0, 0.5, 1.0])


class Asked:
    """Stands for the control: says stop from so many looks on."""

    def __init__(self, stop_after: int) -> None:
        self.looks = 0
        self.stop_after = stop_after

    def __getitem__(self, _cell: int) -> int:
        self.looks += 1
        return int(self.looks > self.stop_after)


def ladder(asked: Any, out: Any) -> None:
    ladder_figures.ladder_figures(np.arange(1.0, 40.0), POWERS, out, asked)


def pairs(asked: Any, out: Any) -> None:
    x = np.arange(1.0, 40.0)
    straightening.straightening(x * x, x, POWERS, out, asked)


@pytest.mark.parametrize(
    ("kernel", "answers", "width"),
    [(ladder, POWERS.size, len(ladder_figures.FIGURES)), (pairs, POWERS.size**2, 4)],
)
def test_a_stop_is_heeded_between_rungs(kernel: Any, answers: int, width: int) -> None:
    whole, cut = np.full(answers * width, NULL), np.full(answers * width, NULL)
    kernel(never := Asked(10**9), whole)
    assert never.looks >= answers
    kernel(Asked(never.looks - 2), cut)
    written = ~np.isnan(cut.reshape(answers, width)[:, 0])
    assert 0 < written.sum() < answers
    kernel(Asked(0), cut := np.full(answers * width, NULL))
    assert np.isnan(cut).all()
    assert not np.isnan(whole.reshape(answers, width)[:, 0]).any()
