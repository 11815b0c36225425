"""Groups with labels to compare, laid out for the loops over arrangements."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from midspread.udfs.declaring import Values
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import row_numbers
from midspread.udfs.parameters import ParameterError
from midspread.udfs.resampling.permutation.cells import Cells
from midspread.udfs.resampling.permutation.orders import Codes, number_of_arrangements


@dataclass(frozen=True)
class Labelled:
    """Some groups of a batch, each with two labels or more.

    Attributes
    ----------
    values : ndarray of float64
        Group by group, in each by stratum, then label, then value.
    starts : ndarray of int64
        Group g holds ``values[starts[g] : starts[g + 1]]``.
    strata, first_stratum : ndarray of int64
        Bounds of the strata among the values, and each group's first stratum.
    sizes, first_label : ndarray of int64
        Number of values of each label, and each group's first label; a group's labels are 0, 1, …
    cells : Cells
        The parts of the values with one group, stratum and label.
    first_cell : ndarray of int64
        Each stratum's first cell.
    """

    values: Values
    starts: Indices
    strata: Indices
    first_stratum: Indices
    sizes: Indices
    first_label: Indices
    cells: Cells
    first_cell: Indices

    @property
    def lengths(self) -> Indices:
        """Number of values of each group."""
        return np.diff(self.starts)

    @property
    def is_stratified(self) -> bool:
        """Whether any group has more than one stratum."""
        return self.strata.size - 1 > self.starts.size - 1

    @property
    def codes(self) -> Codes:
        """The label of each value."""
        return np.repeat(self.cells.labels.astype(np.int32), self.cells.sizes)

    def with_label(self, label: int) -> Indices:
        """How many values of each stratum have a label."""
        counts = np.zeros(self.strata.size - 1, dtype=np.int64)
        stratum = np.repeat(np.arange(counts.size), np.diff(self.first_cell))
        mine = self.cells.labels == label
        counts[stratum[mine]] = self.cells.sizes[mine]
        return counts

    def by_label(self) -> Values:
        """The values group by group and label by label."""
        if not self.is_stratified:
            return self.values
        order = np.lexsort((self.cells.labels, self.cells.groups))
        return self.values[spread(self.cells.offsets[order], self.cells.sizes[order])]

    def arrangements(self, limits: Values) -> Values:
        """The number of ways to arrange each group's labels; infinite beyond its limit."""
        sizes, bounds = self.cells.sizes, self.first_cell
        found = np.ones(limits.size)
        for g in range(limits.size):
            for s in range(self.first_stratum[g], self.first_stratum[g + 1]):
                found[g] *= number_of_arrangements(sizes[bounds[s] : bounds[s + 1]], limits[g])
        return np.where(found <= limits, found, np.inf)


def eligible(
    function: str,
    cells: Cells,
    size: int,
    values: Any,
    two_labels: bool,
    baselines: Indices | None,
) -> tuple[Indices, Indices]:
    """The groups that have labels to compare, and for each cell its label's number in its group."""
    pairs = np.unique(np.stack((cells.groups, cells.labels), axis=1), axis=0)
    counts = np.bincount(pairs[:, 0], minlength=size)
    first = row_numbers(counts)
    if two_labels and (counts > 2).any():
        group = int(np.flatnonzero(counts > 2)[0])
        seen = [values[int(i)].as_py() for i in pairs[first[group] : first[group + 1], 1]]
        listed = ", ".join(str(label) for label in seen[:5]) + (", …" if len(seen) > 5 else "")
        raise ParameterError(
            f"{function}: label must have two values in a group, got {len(seen)} ({listed}); "
            f"keep two of them with WHERE, or compare all of them with permutation_test_k."
        )
    width = int(pairs[:, 1].max(initial=0)) + 1
    rank = np.searchsorted(pairs[:, 0] * width + pairs[:, 1], cells.groups * width + cells.labels)
    own = rank - first[cells.groups]
    chosen = counts >= 2
    if baselines is not None:
        given = np.flatnonzero((baselines != -1) & chosen)
        is_first = pairs[first[given], 1] == baselines[given]
        is_second = pairs[first[given] + 1, 1] == baselines[given]
        if not (is_first | is_second).all():
            group = int(given[~(is_first | is_second)][0])
            seen = [str(values[int(pairs[first[group] + i, 1])].as_py()) for i in range(2)]
            raise ParameterError(
                f"{function}: baseline must be a label of its group, but the group holds "
                f"{seen[0]} and {seen[1]}; give one of these, or leave baseline out."
            )
        swapped = np.zeros(size, dtype=np.bool_)
        swapped[given[is_second]] = True
        own = np.where(swapped[cells.groups], 1 - own, own)
    return np.flatnonzero(chosen), own


def labelled_groups(cells: Cells, groups: Indices, own: Indices, size: int) -> Labelled:
    """The cells of some groups, in the order of strata and labels."""
    number = np.full(size, -1, dtype=np.int64)
    number[groups] = np.arange(groups.size)
    kept = np.flatnonzero(number[cells.groups] >= 0)
    order = kept[np.lexsort((own[kept], cells.strata[kept], number[cells.groups[kept]]))]
    sizes = cells.sizes[order]
    offsets = row_numbers(sizes)
    values = cells.values
    if not np.array_equal(order, np.arange(cells.groups.size)):
        values = values[spread(cells.offsets[order], sizes)]
    group, stratum, label = number[cells.groups[order]], cells.strata[order], own[order]
    is_new = np.ones(order.size, dtype=np.bool_)
    is_new[1:] = (np.diff(group) != 0) | (np.diff(stratum) != 0)
    new = np.flatnonzero(is_new)
    label_counts = np.zeros(groups.size, dtype=np.int64)
    np.maximum.at(label_counts, group, label + 1)
    first_label = row_numbers(label_counts)
    label_sizes = np.bincount(
        first_label[group] + label, weights=sizes, minlength=int(first_label[-1])
    )
    lengths = np.bincount(group, weights=sizes, minlength=groups.size).astype(np.int64)
    return Labelled(
        values,
        row_numbers(lengths),
        np.concatenate((offsets[new], offsets[-1:])),
        row_numbers(np.bincount(group[new], minlength=groups.size)),
        label_sizes.astype(np.int64),
        first_label,
        Cells(values, offsets, group, stratum, label),
        np.concatenate((new, [order.size])),
    )


def spread(starts: Indices, sizes: Indices) -> Indices:
    """starts[i], starts[i] + 1, …, sizes[i] of them, for each i."""
    ends = row_numbers(sizes)
    return np.arange(int(ends[-1])) + np.repeat(starts - ends[:-1], sizes)
