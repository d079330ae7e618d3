"""Declaration documents: whatever JSON says, the answer is a declaration or an InputError that names the field."""

from __future__ import annotations

import copy

import pytest
from hypothesis import given, settings, strategies as st

from extractor import documents, pipeline
from extractor.errors import InputError
from extractor.model import METHODS, Declaration

GOOD = [documents.declaration_document(pipeline.declare(rig="Wren bench", rounds=10**7, method=method, soundness=1e-6, score=0.82)) for method in METHODS]
ODD = [None, True, False, 0, 1, -1, 2, 10**400, -(10**400), 0.5, float("nan"), float("inf"), 1e308, "", "x", "0.5", [], [1], {}, {"a": 1}, [0] * 16]


def places(value, path=()):
    """Paths of all values in a JSON document."""
    yield path
    if isinstance(value, dict):
        for name in value:
            yield from places(value[name], (*path, name))
    elif isinstance(value, list):
        for number, item in enumerate(value):
            yield from places(item, (*path, number))


def changed(document, path, value):
    document = copy.deepcopy(document)
    target = document
    for step in path[:-1]:
        target = target[step]
    target[path[-1]] = value
    return document


@pytest.mark.parametrize("document", GOOD, ids=METHODS)
def test_every_odd_value_in_every_place(document):
    """Each field replaced by each odd value: a declaration that can be judged, or an InputError; nothing else."""
    for path in places(document):
        for value in ODD:
            if not path:
                continue
            try:
                declaration = documents.declaration_from(changed(document, path, value))
                pipeline.check_declaration(declaration)
            except InputError as fault:
                assert str(fault)
            else:
                assert isinstance(declaration, Declaration)
                assert documents.declaration_from(documents.declaration_document(declaration)) == declaration


@pytest.mark.parametrize("document", GOOD, ids=METHODS)
def test_missing_and_unknown_fields_are_named(document):
    """A field that is missing (unless it has a default) or unknown is an error with its JSON pointer."""
    for name in ("format", "rig", "rounds", "method", "soundness", "output", "settings"):
        shorter = {key: value for key, value in document.items() if key != name}
        with pytest.raises(InputError) as caught:
            documents.declaration_from(shorter)
        assert caught.value.field == f"/{name}"
    with pytest.raises(InputError) as caught:
        documents.declaration_from(document | {"extra": 1})
    assert caught.value.field == "/extra"
    with pytest.raises(InputError) as caught:
        documents.declaration_from(changed(document, ("settings", "extra"), 1))
    assert caught.value.field == "/settings/extra"


JSON = st.recursive(st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
                    lambda inner: st.lists(inner, max_size=5) | st.dictionaries(st.text(max_size=5), inner, max_size=5), max_leaves=20)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(JSON)
def test_any_json_is_answered_in_words(value):
    """Tallies, declarations and certificates read from any JSON value raise nothing but InputError."""
    for read in (documents.tally_from, documents.declaration_from, documents.certificate_from):
        with pytest.raises(InputError):
            read(value if value != [] else None)
