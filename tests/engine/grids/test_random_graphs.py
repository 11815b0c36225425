"""Random graphs of grids: refresh computes exactly the stale ones and ends as a rebuild would."""

import contextlib
import tempfile
from dataclasses import dataclass, field
from pathlib import Path
from typing import cast

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from midspread.engine.grids.columns import add_column
from midspread.engine.grids.entering import create, enter
from midspread.engine.grids.keeping import keep
from midspread.engine.grids.refreshing import look, refresh
from midspread.engine.session import Session

ENTERED = 2
MODULUS = 5  # so that a change need not reach what rests on it

Graph = list[tuple[set[int], int]]  # of each derived grid: which earlier ones it reads, a constant


@st.composite
def graphs(draw: st.DrawFn) -> Graph:
    count = draw(st.integers(2, 5))
    return [
        (
            draw(st.sets(st.integers(0, ENTERED + place - 1), min_size=1, max_size=3)),
            draw(st.integers(0, 3)),
        )
        for place in range(count)
    ]


@dataclass
class Model:
    """What every grid holds and whether it is fresh, worked out in Python."""

    graph: Graph
    entered: list[int] = field(default_factory=lambda: [0] * ENTERED)
    values: dict[int, int] = field(default_factory=dict)
    stale: set[int] = field(default_factory=set)

    def value(self, number: int) -> int:
        return self.entered[number] if number < ENTERED else self.values[number]

    def computed(self, place: int) -> int:
        reads, constant = self.graph[place]
        # The column w of every grid is twice its v.
        return (sum(3 * self.value(one) for one in reads) + constant) % MODULUS

    def users(self, number: int) -> set[int]:
        return {ENTERED + place for place, (reads, _) in enumerate(self.graph) if number in reads}

    def refreshed(self) -> set[int]:
        """Compute what is stale; which grids were computed."""
        done = set()
        for place in range(len(self.graph)):
            number = ENTERED + place
            if number in self.stale:
                done.add(number)
                self.stale.discard(number)
                new = self.computed(place)
                if self.values.get(number) != new:
                    self.values[number] = new
                    self.stale |= self.users(number)
        return done


def query_of(model: Model, place: int) -> str:
    reads, constant = model.graph[place]
    parts = " UNION ALL ".join(f"SELECT v + w AS s FROM g{one}" for one in sorted(reads))
    return f"SELECT 1 AS k, ((sum(s) + {constant}) % {MODULUS})::INTEGER AS v FROM ({parts})"


@settings(max_examples=5, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    graphs(),
    st.lists(
        st.one_of(
            st.tuples(st.just("enter"), st.integers(0, ENTERED - 1), st.integers(0, 6)),
            st.tuples(st.just("constant"), st.integers(0, 4), st.integers(0, 6)),
        ),
        min_size=1,
        max_size=4,
    ),
)
def test_refresh_computes_exactly_what_is_stale(
    graph: Graph, changes: list[tuple[str, int, int]]
) -> None:
    with (
        tempfile.TemporaryDirectory() as folder,
        contextlib.chdir(folder),
        Session(threads=1) as session,  # one for all: to make it takes longer than the rest
    ):
        store = Path(folder) / "midspread.duckdb"
        model = Model(graph)
        for number in range(ENTERED):
            create(store, f"g{number}", "k INTEGER, v INTEGER", ["k"])
            enter(store, f"g{number}", ["k", "v"], [["1", "0"]])
            add_column(store, f"g{number}", "w AS (2 * v)")
        for place in range(len(graph)):
            keep(session, store, f"g{ENTERED + place}", query_of(model, place), key=["k"])
            add_column(store, f"g{ENTERED + place}", "w AS (2 * v)")
            model.values[ENTERED + place] = model.computed(place)
        for kind, which, value in changes:
            if kind == "enter":
                done = enter(store, f"g{which}", ["k", "v"], [["1", str(value)]])
                assert done.cells == (model.entered[which] != value)
                if done.cells:
                    model.entered[which] = value
                    model.stale |= model.users(which)
            else:
                place = which % len(graph)
                model.graph[place] = (model.graph[place][0], value)
                name, query = f"g{ENTERED + place}", query_of(model, place)
                keep(session, store, name, query, key=["k"], replacing=True)
                new = model.computed(place)
                model.stale.discard(ENTERED + place)
                if model.values[ENTERED + place] != new:
                    model.values[ENTERED + place] = new
                    model.stale |= model.users(ENTERED + place)
        again = cast("Session", contextlib.nullcontext(session))
        made = list(refresh(lambda: again, store))
        assert all(not one.failure for one in made)
        assert {int(one.grid.name[1:]) for one in made} == model.refreshed()
        for number in range(ENTERED + len(graph)):
            found = session.query(f"SELECT v, w FROM g{number}").rows()
            assert found == [(model.value(number), 2 * model.value(number))]
        states = look(session, store)[1]
        assert {str(one.state) for one in states.values()} == {"fresh"}
        # Rebuilt from nothing, every derived grid holds the same.
        for place in range(len(graph)):
            assert model.values[ENTERED + place] == model.computed(place)
