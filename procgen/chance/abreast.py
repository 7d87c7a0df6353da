"""The text of a kernel with all paths abreast: at each step one path after another, as they lie in memory.

Written from the text of the kernel for arguments of given kinds. Small whole numbers and small arrays of coefficients
are written in, so that the compiler can unroll the loops over them and take several paths at a time. Each path goes
through the same operations in the same order as alone.
"""

from __future__ import annotations

import ast
import copy
from collections.abc import Mapping
from typing import Any

import numpy as np

FEW = 8  # coefficients, and whole numbers, that are written in


def by_step(definition: ast.FunctionDef) -> frozenset[str]:
    """Names that are subscripted by the steps of the loop."""
    steps = {ast.unparse(node.target) for node in definition.body if isinstance(node, ast.For)}
    nodes = [node for node in ast.walk(definition) if isinstance(node, ast.Subscript)]
    return frozenset(ast.unparse(node.value) for node in nodes if ast.unparse(node.slice) in steps)


def kind_of(value: Any, subscripted: bool, by_step: bool, lanes: int) -> Any:
    """How an argument is written: see `_Abreast`; None where it cannot be."""
    if isinstance(value, tuple):
        return ("few", len(value)) if 0 < len(value) <= FEW and all(isinstance(part, float) for part in value) else None
    if isinstance(value, int) and not isinstance(value, bool) and 0 <= value <= FEW:
        return ("whole", value)
    dimensions = np.ndim(value)
    if dimensions == 2:
        return "tile" if value.shape[1] == lanes else "column" if value.shape[1] == 1 else None
    if dimensions == 1 and subscripted and by_step:
        return "steps"
    if dimensions == 1 and subscripted:
        return ("few", len(value)) if len(value) <= FEW else None  # of many, NumPy's rows are quicker
    if dimensions == 1:
        return "row" if len(value) == lanes else "one" if len(value) == 1 else None
    return "number" if dimensions == 0 else None


def passed(value: Any, kind: Any) -> Any:
    """An argument as the text takes it: few coefficients as a tuple, whose length its type says."""
    return tuple(value.tolist()) if isinstance(kind, tuple) and kind[1] and isinstance(value, np.ndarray) else value


def abreast(definition: ast.FunctionDef, kinds: Mapping[str, Any], returns: int) -> str | None:
    """A module with `run(lanes, *arguments, *kept, *rows)`, `kept` a row for each argument that moves.

    None where the kernel is not one loop over steps.
    """
    loops = [node for node in definition.body if isinstance(node, ast.For)]
    if len(loops) != 1 or None in kinds.values():
        return None
    place = definition.body.index(loops[0])
    before, after = definition.body[:place], definition.body[place + 1 :]
    carried = [name for name in kinds if name in moved(definition)]
    if _assigned(loops[0].body) & _assigned(before) or any(kinds[name] not in _ROWS for name in carried):
        return None
    kept = [f"{name}_kept" for name in carried]
    given, writer = _Abreast(kinds), _Abreast({**kinds, **dict.fromkeys(carried, "row")})
    lines = [_each(own, given, name) + f"\n{name} = {own}" for name, own in zip(carried, kept, strict=True)]
    lines += [ast.unparse(writer.visit(copy.deepcopy(node))) for node in before if not isinstance(node, ast.Expr)]
    loop = copy.deepcopy(loops[0])
    loop.iter = writer.visit(loop.iter)
    inner = ast.For(ast.Name("lane", ast.Store()), ast.parse("range(lanes)", mode="eval").body, [], [])
    inner.body = [writer.visit(node) for node in loop.body]
    loop.body = [inner]
    lines.append(ast.unparse(ast.fix_missing_locations(loop)))
    value = after[-1].value if after and isinstance(after[-1], ast.Return) else None
    results = value.elts if isinstance(value, ast.Tuple) else [] if value is None else [value]
    if not all(isinstance(result, ast.Name) and kinds.get(result.id) in _ROWS for result in results):
        return None
    rows = [f"row{i}" for i in range(returns)]
    lines += [_each(row, writer, ast.unparse(result)) for row, result in zip(rows, results, strict=True)]
    body = "\n".join(lines).replace("\n", "\n    ")
    return f"def run(lanes, {', '.join((*kinds, *kept, *rows))}):\n    {body}\n"


def beside(definition: ast.FunctionDef, kinds: Mapping[str, Any], returns: int) -> str | None:
    """A module with `run(lanes, stride, steps, keep, *arguments, *kept, *rows, *at_hand)`: pieces of one path abreast.

    Each lane takes so many steps, `stride` after those of the lane before; they are brought beside each other a few at
    a time, `at_hand` having room for them, a tile for each of those of the arguments. Rows move on in the place of the
    arguments. What is found is kept or not. None where the kernel is not one loop over steps of which each reads and
    writes its own step alone, and returns what it carries in the order of its arguments.
    """
    text = abreast(definition, kinds, returns)
    carried = [name for name in kinds if name in moved(definition)]
    tiles = [name for name, kind in kinds.items() if kind == "tile"]
    value = definition.body[-1].value if isinstance(definition.body[-1], ast.Return) else None
    given = value.elts if isinstance(value, ast.Tuple) else [value]
    if text is None or [ast.unparse(name) for name in given if name is not None] != carried:
        return None
    found = [name for name in tiles if name in _stored(definition)]
    if any(kinds[name] != "row" for name in carried) or not found or not _by_their_step(definition, tiles):
        return None
    names = (*kinds, *(f"{name}_kept" for name in carried), *(f"row{i}" for i in range(returns)))
    passed = ", ".join(f"{name}_now" if name in tiles else name for name in names)

    def each_value(line: str, names: list[str], indent: str) -> str:
        loops = f"{indent}for i in range(count):\n{indent}    for lane in range(lanes):\n"
        return loops + "".join(f"{indent}        {line.format(name)}\n" for name in names)

    here, there = "{0}_now[i, lane]", "{0}[lane * stride + begin + i, 0]"
    return (
        f"{text.replace('def run(', 'def abreast(', 1)}\nabreast = compiled(abreast)\n\n"
        f"def run(lanes, stride, steps, keep, {', '.join(names)}, {', '.join(f'{name}_at' for name in tiles)}):\n"
        f"    size = {tiles[0]}_at.shape[0]\n"
        f"    for begin in range(0, steps, size):\n"
        f"        count = min(size, steps - begin)\n"
        + "".join(f"        {name}_now = {name}_at[:count]\n" for name in tiles)
        + each_value(f"{here} = {there}", [name for name in tiles if name not in found], "        ")
        + f"        abreast(lanes, {passed})\n        if keep > 0:\n"
        + each_value(f"{there} = {here}", found, "            ")
        + "        for lane in range(lanes):\n"
        + "".join(f"            {name}[lane] = row{i}[lane]\n" for i, name in enumerate(carried))
    )


def _by_their_step(definition: ast.FunctionDef, tiles: list[str]) -> bool:
    """Whether tiles are read and written at the step of the loop only."""
    nodes = [node for node in ast.walk(definition) if isinstance(node, ast.Subscript)]
    at = {ast.unparse(node.slice) for node in nodes if ast.unparse(node.value) in tiles}
    return at == {ast.unparse(node.target) for node in definition.body if isinstance(node, ast.For)}


def _stored(definition: ast.FunctionDef) -> frozenset[str]:
    """Names of the arrays that are written to."""
    nodes = [node for node in ast.walk(definition) if isinstance(node, ast.Subscript)]
    return frozenset(ast.unparse(node.value) for node in nodes if isinstance(node.ctx, ast.Store))


_ROWS = ("row", "one", "number")


def _each(row: str, writer: _Abreast, name: str) -> str:
    """The text that fills a row of all paths with what is said of one: an assignment to a slice might raise."""
    return f"for lane in range(lanes):\n    {row}[lane] = {ast.unparse(writer.visit(ast.Name(name, ast.Load())))}"


def moved(definition: ast.FunctionDef) -> frozenset[str]:
    """Arguments that are given another value in the loop over steps."""
    bodies = [node for loop in definition.body if isinstance(loop, ast.For) for node in loop.body]
    return frozenset(_assigned(bodies) & {argument.arg for argument in definition.args.args})


def _assigned(nodes: list[ast.stmt]) -> set[str]:
    """Names that are given a value somewhere in the statements."""
    return {
        node.id
        for statement in nodes
        for node in ast.walk(statement)
        if isinstance(node, ast.Name) and isinstance(node.ctx, ast.Store)
    }


class _Abreast(ast.NodeTransformer):
    """Writes what a kernel says of one path as that of path `lane`.

    Kinds: a tile (steps, lanes) or its one column; a row (lanes,), or one for all; a number; numbers (steps,); few
    coefficients, their count beside it; a small whole number, written in.
    """

    def __init__(self, kinds: Mapping[str, Any]) -> None:
        self.kinds = kinds

    def visit_Subscript(self, node: ast.Subscript) -> ast.AST:
        base = node.value
        if isinstance(base, ast.Attribute) and isinstance(base.value, ast.Name):  # name.shape[0]
            kind = self.kinds[base.value.id]
            return ast.Constant(kind[1]) if isinstance(kind, tuple) else node
        kind = self.kinds[base.id] if isinstance(base, ast.Name) else None
        index = self.visit(node.slice)
        if kind in ("tile", "column"):
            index = ast.Tuple([index, _LANE if kind == "tile" else _FIRST], ast.Load())
        return ast.Subscript(base, index, node.ctx)

    def visit_Call(self, node: ast.Call) -> ast.AST:
        if isinstance(node.func, ast.Name) and node.func.id == "len":
            kind = self.kinds[ast.unparse(node.args[0])]
            return ast.Constant(kind[1]) if isinstance(kind, tuple) else node
        node.args = [self.visit(argument) for argument in node.args]
        return node

    def visit_Name(self, node: ast.Name) -> ast.AST:
        kind = self.kinds.get(node.id)
        if kind in ("row", "one"):
            return ast.Subscript(node, _LANE if kind == "row" else _FIRST, node.ctx)
        return ast.Constant(kind[1]) if isinstance(kind, tuple) and kind[0] == "whole" else node


_LANE, _FIRST = ast.Name("lane", ast.Load()), ast.Constant(0)
