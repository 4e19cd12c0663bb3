"""The exceptions: what they are, what they carry, and the helpers of their messages."""

import pickle

import pytest

from drumlin import errors

CLASSES = [
    (errors.OptionError, ValueError, 2),
    (errors.SchemaError, ValueError, 4),
    (errors.DataError, ValueError, 1),
    (errors.MixtureError, ValueError, 1),
    (errors.StreamError, ValueError, 1),
    (errors.TargetError, OSError, 1),
    (errors.SourceError, OSError, 1),
    (errors.DamagedFileError, ValueError, 5),
    (errors.InternalError, RuntimeError, 1),
]


@pytest.mark.parametrize(("kind", "base", "code"), CLASSES)
def test_base_exit_code_and_facts(kind, base, code):
    error = kind("column 'a' is odd", column="a", row=3)
    assert isinstance(error, errors.DrumlinError) and isinstance(error, base)
    assert kind.exit_code == code
    assert str(error) == "column 'a' is odd"
    assert error.facts == {"column": "a", "row": 3}
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is kind and str(again) == str(error) and again.facts == error.facts


def test_facts_may_be_given_as_a_mapping():
    assert errors.DataError("x", {"row": 1}, column="a").facts == {"row": 1, "column": "a"}
    assert errors.TargetError("x", {"file": "f"}).facts == {"file": "f"}
    assert str(errors.DataError()) == ""


@pytest.mark.parametrize(
    ("name", "names", "found"),
    [
        ("lenght", ["width", "length"], " Did you mean 'length'?"),
        ("Length", ["length"], " Did you mean 'length'?"),
        ("price", ["length", "width"], ""),
        ("x", [], ""),
    ],
)
def test_nearest(name, names, found):
    assert errors.nearest(name, names) == found


def test_columns_of_bare_arrays_get_their_names():
    error = errors.DataError("column number 1: its spread is 0", column=1)
    named = errors.name_columns(error, ["a", "b"])
    assert type(named) is errors.DataError
    assert str(named) == "column 'b': its spread is 0"
    assert named.facts == {"column": "b"}
    for other in (errors.DataError("x", column="b"), errors.DataError("x", column=7), errors.DataError("x")):
        assert errors.name_columns(other, ["a", "b"]) is other
