"""What a push would do to a table's rows, and doing it: the same few statements everywhere."""

from dataclasses import dataclass
from typing import Final

from midspread.engine.errors import MidspreadError
from midspread.engine.parsing import quoted
from midspread.engine.pushing.target import Field, Mode, Outcome, Place, Target

_THERE: Final = "_midspread_there"


@dataclass(frozen=True)
class Pair:
    """A column of a grid and the one it goes to, which may be spelt in other case."""

    ours: str
    theirs: str


@dataclass(frozen=True)
class Plan:
    """A push of which everything is known.

    Attributes
    ----------
    target : Target
        Where to.
    place : Place
        Which table.
    staged : str
        The grid's rows beside it, as SQL.
    pairs, keys : tuple of Pair
        All columns, and those that tell rows apart.
    with_null : frozenset of str
        Those of our key columns in which some row has no value.
    rows : int
        How many rows there are to push.
    mode : Mode
        What becomes of those that are there.
    is_new : bool
        Whether the table is made.
    """

    target: Target
    place: Place
    staged: str
    pairs: tuple[Pair, ...]
    keys: tuple[Pair, ...]
    with_null: frozenset[str]
    rows: int
    mode: Mode
    is_new: bool

    @property
    def table(self) -> str:
        """The table as SQL."""
        return self.target.table(self.place)

    def on_key(self) -> str:
        """The condition for a row of the table (t) and one of the grid (s) to have one key."""
        return " AND ".join(
            self.target.same(
                f"t.{quoted(key.theirs)}",
                f"s.{quoted(key.ours)}",
                has_null=key.ours in self.with_null,
            )
            for key in self.keys
        )

    def differing(self) -> str:
        """The condition for two rows of one key to differ; empty when the key is all they have."""
        others = [pair for pair in self.pairs if pair not in self.keys]
        return " OR ".join(
            self.target.differs(f"t.{quoted(pair.theirs)}", f"s.{quoted(pair.ours)}")
            for pair in others
        )


def pairs_of(
    target: Target, place: Place, fields: tuple[Field, ...], found: dict[str, str] | None
) -> tuple[Pair, ...]:
    """Each column of a grid with the one it goes to.

    Raises
    ------
    MidspreadError
        When the table's columns are others.
    """
    if found is None:
        return tuple(Pair(field.name, field.name) for field in fields)
    theirs = {name.casefold(): name for name in found}
    ours = {field.name.casefold() for field in fields}
    lacking = [field.name for field in fields if field.name.casefold() not in theirs]
    foreign = [name for folded, name in theirs.items() if folded not in ours]
    differences = [f"{place} has no {name}" for name in lacking]
    differences += [f"the grid has no {name}" for name in foreign]
    for field in fields:
        name = theirs.get(field.name.casefold())
        if name is not None and not target.accepts(found[name], field):
            differences.append(f"{field.name} is {field.type} here and {found[name]} there")
    if differences:
        raise MidspreadError(
            f"push: the columns of {place} differ from the grid's ({'; '.join(differences)}); "
            f"change the grid's query, or push to another table. Nothing was written."
        )
    return tuple(Pair(field.name, theirs[field.name.casefold()]) for field in fields)


def foresee(plan: Plan) -> Outcome:
    """What a push will do to the table's rows; within its transaction, so that it holds.

    Raises
    ------
    MidspreadError
        When a key that is to be merged is there more than once.
    """
    if plan.is_new:
        return Outcome(added=plan.rows)
    run = plan.target.number
    there = run(f"SELECT count(*) FROM {plan.table}")
    if plan.mode is Mode.APPEND:
        return Outcome(added=plan.rows, left=there)
    if not plan.keys:
        return Outcome(added=plan.rows, removed=there)
    on = plan.on_key()
    joined = f"FROM {plan.table} AS t JOIN {plan.staged} AS s ON {on}"
    pairs = run(f"SELECT count(*) {joined}")
    ours = ", ".join(f"s.{quoted(key.ours)}" for key in plan.keys)
    known = run(f"SELECT count(*) FROM (SELECT DISTINCT {ours} {joined}) AS known")
    if pairs != known:
        if plan.mode is Mode.REPLACE:
            return Outcome(added=plan.rows, removed=there)
        raise MidspreadError(
            f"push: some keys ({', '.join(key.theirs for key in plan.keys)}) are in {plan.place} "
            f"more than once; name more columns with --key. Nothing was written."
        )
    differing = plan.differing()
    changed = run(f"SELECT count(*) {joined} WHERE {differing}") if differing else 0
    if plan.mode is Mode.REPLACE:
        return Outcome(plan.rows - known, changed, known - changed, there - known)
    return Outcome(plan.rows - known, changed, there - changed)


def carry_out(plan: Plan, foreseen: Outcome) -> None:
    """Do it; the target's transaction stays open."""
    ours = ", ".join(f"s.{quoted(pair.ours)}" for pair in plan.pairs)
    theirs = ", ".join(quoted(pair.theirs) for pair in plan.pairs)
    insert = f"INSERT INTO {plan.table} ({theirs}) SELECT {ours} FROM {plan.staged} AS s"
    run = plan.target.run
    if plan.mode is not Mode.MERGE or plan.is_new:
        if plan.mode is Mode.REPLACE and not plan.is_new:
            run(f"DELETE FROM {plan.table}")
        run(insert)
        return
    on = plan.on_key()
    if foreseen.changed:
        setting = ", ".join(
            f"{quoted(pair.theirs)} = s.{quoted(pair.ours)}"
            for pair in plan.pairs
            if pair not in plan.keys
        )
        run(
            f"UPDATE {plan.table} AS t SET {setting} FROM {plan.staged} AS s"
            f" WHERE {on} AND ({plan.differing()})"
        )
    if foreseen.added:
        # A join, not NOT EXISTS, for which SQLite would search the whole table once a row.
        keys = ", ".join(quoted(key.theirs) for key in plan.keys)
        there = f"(SELECT 1 AS {_THERE}, {keys} FROM {plan.table}) AS t"
        run(f"{insert} LEFT JOIN {there} ON {on} WHERE t.{_THERE} IS NULL")
