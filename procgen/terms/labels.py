"""By which label each term of a body goes: its own; what has none goes by its kind where it is the only one of it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

from procgen.spec.model import Entry
from procgen.spec.words import did_you_mean

USE = "use"


def labelled(body: tuple[Entry, ...]) -> Iterator[tuple[str, Entry]]:
    """Every entry of a body with its label, "" where several would share it; a shock has that of what it drives.

    Where there are several `use` without a label, each goes by what it uses: `use_load` for load.
    """
    entries = list(_walk(body))
    plain = [entry for entry, is_shock in entries if not is_shock and entry.label in ("", entry.kind)]
    kinds = Counter(entry.kind for entry in plain)
    several = {id(entry): _by_target(entry) for entry in plain if kinds[entry.kind] > 1}
    taken = Counter([*several.values(), *(entry.label for entry, is_shock in entries if id(entry) not in several)])
    for entry, _ in entries:
        label = several.get(id(entry), entry.label or entry.kind)
        yield "" if id(entry) in several and taken[label] > 1 else label, entry


def entry_named(body: tuple[Entry, ...], owner: str, label: str, name: str) -> Entry:
    """The entry of that label; KeyError with a sentence where there is none, or more than one."""
    found: dict[str, Entry] = {}
    for known, entry in labelled(body):
        if known:
            found.setdefault(known, entry)
    if label in found:
        return found[label]
    count = sum(1 for entry, is_shock in _walk(body) if entry.kind == label and not is_shock)
    if count > 1:
        names = [f"{owner}.{known}" for known, entry in found.items() if entry.kind == label]
        here = f" ({', '.join(names)})" if names else ""
        raise KeyError(
            f"{owner} has {count} terms of kind {label}{here}: write as: some_name beside the one that is meant, "
            f"and name {owner}.some_name"
        )
    hint = did_you_mean(label, found)
    raise KeyError(f"expected one of {', '.join(found)} in {owner}, got {label!r} in {name!r}{hint and f'; {hint}'}")


def _by_target(entry: Entry) -> str:
    return f"{USE}_{entry.values['name'].replace('.', '_')}" if entry.kind == USE else entry.kind


def _walk(entries: tuple[Entry, ...], is_shock: bool = False) -> Iterator[tuple[Entry, bool]]:
    """Every entry, each before what it holds, and whether it is a shock."""
    for entry in entries:
        yield entry, is_shock
        if entry.shock is not None:
            yield from _walk((entry.shock,), True)
        for body in entry.bodies.values():
            yield from _walk(body)
