"""Reading `correlation`: pairs, groups, matrices with names, factors, blocks; and whether they fit together."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from procgen.spec.copulas import COPULA, Ties
from procgen.spec.declare import INVALID, Domain, Flag, Parameter, Reading, Real, Reals, Records, Schema, read_each
from procgen.spec.domains import one_or_list
from procgen.spec.following import BY, ByState, Followers, in_state, states_in
from procgen.spec.links import Links
from procgen.spec.model import Correlation, Frozen
from procgen.spec.nearest import DECIMALS, nearest
from procgen.spec.tree import Tree
from procgen.spec.words import did_you_mean, one_of

Rows = tuple[tuple[float, ...], ...]

_TOGETHER = "or let the series that are to move together use one body under shared:"
_REPAIR = (
    "repair takes the nearest correlation matrix in place of a stated one, beside matrix: alone; write {names: […], "
    "matrix: […], repair: true}, or remove it"
)

MAX_NAMES = 1000
MOST_REPAIRED = 100
SMALLEST = 1e-10  # below this a matrix is singular to rounding, and a draw would be a copy of others


class Names(Domain):
    """A list of addresses "series.label"; read as a tuple of trees, for the faults that come later."""

    def __init__(self, exactly: int | None = None) -> None:
        self.exactly = exactly

    def describe(self) -> str:
        count = "two" if self.exactly == 2 else "at least two"
        return f"a list of {count} names such as load.arma"

    def read(self, tree: Tree, reader: Reading) -> object:
        sound = tree.is_list and all(isinstance(t.value, str) for t in tree.value)
        if not sound or len(tree.value) < 2 or (self.exactly and len(tree.value) != self.exactly):
            return reader.expected(tree, self.describe())
        return tree.value

    def schema(self) -> Schema:
        if self.exactly:
            return {"type": "array", "items": {"type": "string"}, "minItems": 2, "maxItems": self.exactly}
        return one_or_list({"type": "string"})  # one name may be that of a group


class Matrix(Domain):
    """A list of rows of numbers; read as a tuple of tuples of floats."""

    def describe(self) -> str:
        return "a list of rows of numbers, as in [[1, 0.3], [0.3, 1]]"

    def read(self, tree: Tree, reader: Reading) -> object:
        if not tree.is_list or not all(t.is_list for t in tree.value):
            return reader.expected(tree, self.describe())
        rows = tuple([Reals(at_least=-1.0, at_most=1.0).read(row, reader) for row in tree.value])
        return INVALID if INVALID in rows else rows

    def schema(self) -> Schema:
        return {"type": "array", "items": {"type": "array", "items": Real(at_least=-1, at_most=1).schema()}}


_NUMBER = ByState(Real(above=-1.0, below=1.0))
_EACH = Parameter("value", "ρ", _NUMBER, "correlation of the primary normals")
_FORMS: dict[str, tuple[Parameter, ...]] = {
    "between": (Parameter("between", "", Names(exactly=2), "the two that are correlated"), _EACH, BY),
    "within": (Parameter("within", "", Names(), "names of which any two are correlated alike"), _EACH, BY),
    "matrix": (
        Parameter("names", "", Names(), "the rows and columns of the matrix"),
        Parameter("matrix", "R", ByState(Matrix()), "correlations of the primary normals, with 1 on the diagonal"),
        BY,
        Parameter("repair", "", Flag(), "take the nearest correlation matrix instead of one that is none", False),
        Parameter("moved", "", Real(at_least=0), "by how much the repair moved an entry; written by it", None),
    ),
    "loadings": (
        Parameter("names", "", Names(), "the rows of the loadings"),
        Parameter("loadings", "Λ", ByState(Matrix()), "what each has of each common factor: R = ΛΛ′ off the diagonal"),
        BY,
    ),
    "blocks": (
        Parameter(
            "blocks",
            "",
            Records(Parameter("names", "", Names(), "names of which any two are correlated alike"), _EACH),
            "groups, each with a correlation of its own",
        ),
        Parameter("across", "ρ", _NUMBER, "correlation of any two of different groups", 0.0),
        BY,
    ),
}
FORMS = {form: (*parameters, COPULA) for form, parameters in _FORMS.items()}
WAYS = (
    "{between: [a.x, b.y], value: 0.3}, {within: […], value: 0.3}, {names: […], matrix: […]}, "
    "{names: […], loadings: […]} or {blocks: [{names: […], value: 0.5}, …], across: 0.1}"
)


def read_correlation(tree: Tree, links: Links, reader: Reading) -> Correlation:
    """Return the correlation of all named sources, unnamed pairs 0; every fault is reported."""
    pairs = _Pairs(links, reader)
    items = tree.value if tree.is_list else (tree,)
    before = len(reader.faults)
    for item in items:
        _read_item(with_members(item, links), pairs, reader)
    if len(reader.faults) > before or not pairs.order:
        return Correlation()
    if len(pairs.order) > MAX_NAMES:
        reader.fault(tree, f"expected at most {MAX_NAMES} correlated names, got {len(pairs.order):,}")
        return Correlation()
    following = pairs.followers.joined(tuple(pairs.order), pairs.values, SMALLEST, reader)
    if len(reader.faults) > before:
        return Correlation()
    followed = {name for each in following for name in each.names}
    matrix = pairs.matrix()
    rest = [i for i, name in enumerate(pairs.order) if name not in followed]
    smallest = float(np.linalg.eigvalsh(matrix[np.ix_(rest, rest)])[0]) if rest else 1.0
    if smallest < SMALLEST:
        reader.fault(
            tree,
            f"expected a positive definite correlation, got one whose smallest eigenvalue is {smallest:.3g}; "
            "bring the values nearer to 0, or to each other" + _offer(items),
        )
        return Correlation()
    copulas = pairs.ties.joined(tuple(pairs.order), reader)
    return Correlation(tuple(pairs.order), tuple(tuple(map(float, row)) for row in matrix), copulas, following)


def _offer(items: Sequence[Tree]) -> str:
    stated = any("matrix" in item.value and "repair" not in item.value for item in items)
    return ", or add repair: true for the nearest one that is" if stated else ""


def with_members(tree: Tree, links: Links) -> Tree:
    """Return an item with the series of a group in the place of its name: `stores.ar` is `.ar` of each of them."""
    groups: dict[str, list[str]] = {}
    for name, owner in links.owners.items():
        if getattr(owner, "group", None):
            groups.setdefault(owner.group, []).append(name)  # type: ignore[union-attr, arg-type]

    def expanded(inner: Tree) -> Tree:
        names = [inner] if isinstance(inner.value, str) else list(inner.value) if inner.is_list else []
        if not any(_group_of(name) in groups for name in names):
            return inner
        found: list[Tree] = []
        for name in names:
            label = str(name.value).partition(".")[2]
            members = groups.get(_group_of(name))
            found += [name] if members is None else [Tree(f"{member}.{label}", name.place) for member in members]
        return Tree(tuple(found), inner.place)

    if not groups or not tree.is_map:
        return tree
    if "within" in tree.value:
        return Tree({**tree.value, "within": expanded(tree.value["within"])}, tree.place, tree.keys)
    if "blocks" in tree.value and tree.value["blocks"].is_list:
        blocks = tree.value["blocks"]
        made = [
            Tree({**block.value, "names": expanded(block.value["names"])}, block.place, block.keys)
            if block.is_map and "names" in block.value
            else block
            for block in blocks.value
        ]
        return Tree({**tree.value, "blocks": Tree(tuple(made), blocks.place)}, tree.place, tree.keys)
    return tree


def _group_of(name: Tree) -> str:
    return name.value.partition(".")[0] if isinstance(name.value, str) else ""


class _Pairs:
    """Correlations as they are met, by pair of names."""

    def __init__(self, links: Links, reader: Reading) -> None:
        self.links = links
        self.reader = reader
        self.order: dict[str, int] = {}
        self.values: dict[tuple[int, int], Any] = {}  # numbers, or numbers by state
        self.ties, self.followers = Ties(), Followers()

    def name(self, tree: Tree) -> int | None:
        """Return the number of a name in order of first appearance, or None after a fault."""
        name = tree.value
        if name not in self.order:
            if message := self._misnamed(name):
                self.reader.fault(tree, message)
                return None
            self.order[name] = len(self.order)
        return self.order[name]

    def add(self, trees: Sequence[Tree], first: int | None, second: int | None, value: Any) -> None:
        """Keep one correlation; `trees` are its names as written."""
        if first is None or second is None:
            return
        key = (min(first, second), max(first, second))
        if first == second:
            self.reader.fault(trees[1], f"expected two different names, got {trees[1].value} twice")
        elif key in self.values:
            message = f"the correlation of {trees[0].value} and {trees[1].value} is given twice; remove one"
            self.reader.fault(trees[1], message)
        else:
            self.values[key] = value

    def matrix(self) -> np.ndarray:
        matrix = np.eye(len(self.order))
        for (i, j), value in self.values.items():
            if not isinstance(value, Frozen):
                matrix[i, j] = matrix[j, i] = value
        return matrix

    def _misnamed(self, name: str) -> str:
        """Return why no primary draws go by a name, or ""."""
        try:
            target = self.links.find(name)
        except LookupError as error:
            return str(error)
        sources = [f"{target.owner}.{label}" for label in self.links.sources(target.owner)]
        if target.entry is not None and target.output is None and self.links.draws(target.entry):
            return ""
        own = self.links.own(target.owner, target.entry)
        if own and (target.entry is not None or not sources):
            told = self.links.together(target.owner, own[0].partition(".")[2])
            plain = told or "put a term with plain shocks beside it and name that"
            beside = f"name {one_of(sources)}" if sources else plain
            return f"the shocks of {one_of(own)} are its own and cannot be mixed with others'; {beside}, {_TOGETHER}"
        if not sources:
            return f"expected a term that draws shocks, got {name}; nothing in {target.owner} draws any"
        return f"expected a term that draws shocks, got {name}; in {target.owner} that is {one_of(sources)}"


def _read_item(tree: Tree, pairs: _Pairs, reader: Reading) -> None:
    forms = [form for form in FORMS if tree.is_map and form in tree.value]
    if len(forms) != 1:
        hint = did_you_mean(next(iter(tree.value), None), FORMS) if tree.is_map else ""
        reader.expected(tree, WAYS, hint)
        return
    before = len(reader.faults)
    if "repair" in tree.value and forms[0] != "matrix":
        reader.fault(tree.key("repair"), _REPAIR)
        tree = Tree({key: inner for key, inner in tree.value.items() if key != "repair"}, tree.place, tree.keys)
    values = read_each(tree, FORMS[forms[0]], reader)
    names = _names(forms[0], values)
    if names is None:
        return
    places = [pairs.name(name) for name in names]
    pairs.ties.add(names, values["copula"], tree)
    states = states_in(tree, values, pairs.links, reader)
    if len(reader.faults) > before or states is None:
        return
    pairs.followers.add(names, values.get("by"), states, tree)
    rows = _by_state(forms[0], tree, values, states, len(names), reader)
    for i, first in enumerate(places if rows else []):
        for j in range(i + 1, len(places)):
            assert rows is not None
            pairs.add((names[i], names[j]), first, places[j], rows[i][j])


def _by_state(
    form: str, tree: Tree, values: dict[str, Any], states: Sequence[str], count: int, reader: Reading
) -> tuple[tuple[Any, ...], ...] | None:
    """Return the correlations of an item, each a mapping of states to numbers where these differ."""
    if not states:
        return _rows(form, tree, values, count, reader)
    each = {}
    for state in states:
        inside = tree
        if form in ("matrix", "loadings"):  # whose faults have places in them
            inside = Tree({**tree.value, form: tree.value[form].value[state]}, tree.place, tree.keys)
        rows = _rows(form, inside, in_state(values, state), count, reader)
        if rows is None:
            return None
        each[state] = rows
    places = range(count)
    return tuple([tuple([_of_states({s: rows[i][j] for s, rows in each.items()}) for j in places]) for i in places])


def _of_states(numbers: dict[str, float]) -> Any:
    """Numbers by state; the number itself where it is the same in all."""
    return Frozen(numbers) if len(set(numbers.values())) > 1 else next(iter(numbers.values()))


def _names(form: str, values: dict[str, Any]) -> list[Tree] | None:
    """Return the names of an item as trees, in order; None where they could not be read."""
    if form == "blocks":
        blocks = values["blocks"]
        return None if blocks is INVALID else [name for block in blocks for name in block["names"]]
    names = values[form if form in ("between", "within") else "names"]
    return None if names is INVALID else list(names)


def _rows(form: str, tree: Tree, values: dict[str, Any], count: int, reader: Reading) -> Rows | None:
    """Return the correlations of the names of an item as a matrix, or None after a fault."""
    if form == "matrix":
        return _matrix(tree, values, count, reader)
    if form == "loadings":
        return _by_factors(tree, values["loadings"], count, reader)
    if form == "blocks":
        group = [i for i, block in enumerate(values["blocks"]) for _ in block["names"]]
        inside = [block["value"] for block in values["blocks"]]
        return tuple(tuple(inside[i] if i == j else values["across"] for j in group) for i in group)
    return ((values["value"],) * count,) * count


def _matrix(tree: Tree, values: dict[str, Any], count: int, reader: Reading) -> Rows | None:
    rows, place = values["matrix"], tree.value["matrix"]
    if not _proper(place, rows, count, reader):
        return None
    if not values["repair"] or float(np.linalg.eigvalsh(np.array(rows))[0]) >= SMALLEST:
        return rows
    if count > MOST_REPAIRED:
        reader.fault(place, f"expected at most {MOST_REPAIRED} names with repair, got {count}; repair parts of it")
        return None
    # The repaired matrix takes the place of the stated one in the spec: whoever reads that sees what is drawn.
    repaired = nearest(np.array(rows))
    moved = round(float(np.abs(repaired - np.array(rows)).max()), DECIMALS)
    trees = [tuple([Tree(value, place.place) for value in row]) for row in repaired.tolist()]
    tree.value["matrix"] = Tree(tuple([Tree(row, place.place) for row in trees]), place.place)
    tree.value["moved"] = Tree(moved, place.place)
    return tuple(tuple(row) for row in repaired.tolist())


def _by_factors(tree: Tree, loadings: Rows, count: int, reader: Reading) -> Rows | None:
    """Return ΛΛ′, 1 on the diagonal: sums in order, as everything that values follow from."""
    place = tree.value["loadings"]
    if len(loadings) != count or len({len(row) for row in loadings}) != 1:
        reader.fault(place, f"expected {count} rows, one a name, each with one number a factor; got {len(loadings)}")
        return None
    for i, row in enumerate(loadings):
        share = _product(row, row)
        if share >= 1.0:
            hint = "what is left up to 1 is its own; lower its loadings"
            reader.fault(place.value[i], f"expected squares that sum to less than 1, got {share:g}; {hint}")
            return None
    return tuple(
        tuple(1.0 if i == j else _product(one, other) for j, other in enumerate(loadings))
        for i, one in enumerate(loadings)
    )


def _product(one: Sequence[float], other: Sequence[float]) -> float:
    total = 0.0
    for a, b in zip(one, other, strict=True):
        total = total + a * b
    return total


def _proper(tree: Tree, rows: Rows, count: int, reader: Reading) -> bool:
    """Return whether rows are a correlation matrix for `count` names, after reporting why not."""
    widths = {len(row) for row in rows}
    if len(rows) != count or widths != {count}:
        noun = "row" if len(rows) == 1 else "rows"
        given = f"{len(rows)} {noun} of {' or '.join(map(str, sorted(widths)))}" if rows else "no rows"
        reader.fault(tree, f"expected {count} rows of {count} for {count} names, got {given}")
        return False
    for i in range(count):
        if rows[i][i] != 1.0:
            reader.fault(tree.value[i], f"expected 1 on the diagonal, got {rows[i][i]:g} in row {i + 1}")
            return False
        for j in range(i):
            if rows[i][j] != rows[j][i]:
                given = f"{rows[i][j]:g} in row {i + 1}, column {j + 1} and {rows[j][i]:g} across it"
                reader.fault(tree.value[i], f"expected a symmetric matrix, got {given}")
                return False
    return True
