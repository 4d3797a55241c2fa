"""Hypothesis strategies for records of every type, derived from the types themselves, so that new
fields are covered as soon as they exist."""

from __future__ import annotations

import types
from typing import Any, Literal, Union, get_args, get_origin

import msgspec
from hypothesis import strategies as st

from monitor.growthlog.records import AnyRecord, Evidence, Snapshot

RECORD_TYPES: tuple[type[msgspec.Struct], ...] = get_args(AnyRecord)

_INTEGERS = st.integers(-(2**53), 2**53)
_FINITE = st.floats(allow_nan=False, allow_infinity=False)
# Surrogates alone are no text; what becomes of them has a test of its own.
_TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=30)
_JSON = st.recursive(
    st.none() | st.booleans() | _INTEGERS | _FINITE | _TEXTS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(_TEXTS, inner, max_size=3),
    max_leaves=8,
)


def of_type(kind: Any, wild: bool) -> st.SearchStrategy[Any]:
    """Values of an annotated type; floats may be non-finite where `wild`."""
    origin, inner = get_origin(kind), get_args(kind)
    if kind is float:
        return st.floats() if wild else _FINITE
    if origin in (Union, types.UnionType):
        return st.one_of(*(of_type(choice, wild) for choice in inner))
    if origin is Literal:
        return st.sampled_from(inner)
    if origin is tuple and inner[-1] is ...:
        return st.lists(of_type(inner[0], wild), max_size=5).map(tuple)
    if origin is tuple:
        return st.tuples(*(of_type(part, wild) for part in inner))
    if origin is dict:
        return st.dictionaries(_TEXTS, of_type(inner[1], wild), max_size=4)
    if isinstance(kind, type) and issubclass(kind, msgspec.Struct):
        return structs(kind, wild)
    plain = {
        int: _INTEGERS,
        str: _TEXTS,
        bool: st.booleans(),
        type(None): st.none(),
        object: _JSON,
    }
    return plain[kind]


def structs(kind: type[msgspec.Struct], wild: bool = False) -> st.SearchStrategy[Any]:
    """Instances of a struct; in evidence and verdicts numbers may be anything."""
    wild = wild or kind is Evidence
    given: dict[str, st.SearchStrategy[Any]] = {}
    for field in msgspec.structs.fields(kind):
        if field.name == "at":
            given[field.name] = st.floats(0.0, 4e9)
        elif field.name == "seq":
            given[field.name] = st.integers(1, 2**53)
        else:
            given[field.name] = of_type(field.type, wild or field.name == "verdict")
    return st.builds(kind, **given)


any_record: st.SearchStrategy[Any] = st.one_of(*(structs(kind) for kind in RECORD_TYPES))
any_snapshot = structs(Snapshot)
any_evidence = structs(Evidence)
