"""Cheap dataclasses against those of the standard library, made of the same class."""

from __future__ import annotations

import copy
import dataclasses
import pickle
from typing import Any, ClassVar

import pytest

from procgen.spec import records


def declared(make: Any, **options: Any) -> type:
    @make(**options)
    class Row:
        """A row."""

        unit: ClassVar[str] = "m"
        name: str
        size: float = 1.0
        tags: list = dataclasses.field(default_factory=list)
        place: str = dataclasses.field(default="", compare=False, repr=False)

    return Row


@pytest.fixture(params=[{}, {"frozen": True}, {"eq": False}, {"frozen": True, "eq": False}], ids=str)
def both(request):
    return declared(records.dataclass, **request.param), declared(dataclasses.dataclass, **request.param)


def test_objects_have_the_same_values_and_say_the_same(both):
    for given, named in [
        (("a",), {}),
        (("a", 2.0, ["b"], "c"), {}),
        ((), {"name": "a", "place": "c"}),
        (("a",), {"tags": ["b"], "size": 3.0}),
    ]:
        ours, theirs = (kind(*given, **named) for kind in both)
        assert vars(ours) == vars(theirs)
        assert [*vars(ours)] == [*vars(theirs)]
        assert repr(ours) == repr(theirs)
        assert dataclasses.asdict(ours) == dataclasses.asdict(theirs)
        assert vars(dataclasses.replace(ours, size=7.0)) == vars(dataclasses.replace(theirs, size=7.0))
        assert vars(copy.deepcopy(ours)) == vars(theirs)
    assert [one.name for one in dataclasses.fields(both[0])] == [one.name for one in dataclasses.fields(both[1])]


def test_what_a_factory_makes_is_no_others(both):
    assert both[0]("a").tags is not both[0]("a").tags


def test_calls_that_fail_fail_with_both(both):
    for given, named in [
        ((), {}),
        (("a", 1.0, [], "c", "d"), {}),
        (("a",), {"name": "b"}),
        (("a",), {"colour": "red"}),
    ]:
        for kind in both:
            with pytest.raises(TypeError):
                kind(*given, **named)


def test_the_same_are_equal(both):
    pairs = [
        (("a", 1.0, [], "here"), ("a", 1.0, [], "there")),
        (("a", 1.0), ("a", 2.0)),
        (("a", float("nan")), ("a", float("nan"))),
    ]
    for some, others in pairs:
        ours, theirs = ((kind(*some) == kind(*others)) for kind in both)
        assert ours is theirs
    assert both[0]("a") != both[1]("a")


def test_what_can_be_hashed_and_changed(both):
    ours, theirs = (kind("a", 1.0, ()) for kind in both)
    assert (type(ours).__hash__ is None) == (type(theirs).__hash__ is None)
    if type(theirs).__hash__ not in (None, object.__hash__):
        assert hash(ours) == hash(type(ours)("a", 1.0, (), "there"))
        assert {ours: 1}[type(ours)("a", 1.0, ())] == 1
    for one in (ours, theirs):
        try:
            one.size = 5.0
        except dataclasses.FrozenInstanceError:
            changed = False
        else:
            changed = True
        if one is ours:
            as_ours = changed
    assert changed is as_ours
    if not changed:
        with pytest.raises(dataclasses.FrozenInstanceError):
            del ours.size


def test_what_a_class_says_itself_is_kept():
    def made(make: Any) -> type:
        @make(frozen=True)
        class Own:
            size: float

            def __post_init__(self) -> None:
                object.__setattr__(self, "size", float(self.size))

            def __repr__(self) -> str:
                return "own"

            def __eq__(self, other: object) -> bool:
                return True

        return Own

    for make in (records.dataclass, dataclasses.dataclass):
        one = made(make)(3)
        assert repr(one) == "own"
        assert one == 7
        assert isinstance(one.size, float)
        assert hash(one) == hash(made(make)(3))


def test_fields_are_inherited():
    def made(make: Any) -> Any:
        @make(frozen=True)
        class Above:
            name: str
            size: float = 1.0

        @make(frozen=True)
        class Below(Above):
            colour: str = "red"

        return Above, Below

    (above, below), (_, theirs) = made(records.dataclass), made(dataclasses.dataclass)
    assert vars(below("a", 2.0)) == vars(theirs("a", 2.0))
    assert repr(below("a")) == repr(theirs("a"))
    assert below("a") != above("a")


@records.dataclass(frozen=True)
class Kept:
    name: str


def test_objects_go_through_pickle():
    assert pickle.loads(pickle.dumps(Kept("a"))) == Kept("a")


def test_what_is_beyond_it_is_left_to_the_standard_library_or_refused():
    @records.dataclass(order=True, frozen=True)
    class Ordered:
        size: int

    assert Ordered(1) < Ordered(2)
    with pytest.raises(TypeError, match="take dataclass from there"):

        @records.dataclass
        class Strange:
            size: int = dataclasses.field(init=False)
