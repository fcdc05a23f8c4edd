"""Errors read as one plain line and survive a process boundary."""

import pickle

import pytest

from grader import errors

ALL = [value for value in vars(errors).values() if isinstance(value, type) and issubclass(value, Exception)]


@pytest.mark.parametrize("kind", ALL)
def test_an_error_survives_pickling(kind: type[errors.GraderError]) -> None:
    error = pickle.loads(pickle.dumps(kind("it broke", path="a b.tif", hint="mend it")))
    assert type(error) is kind
    assert str(error) == "a b.tif: it broke; mend it"


@pytest.mark.parametrize("kind", ALL)
def test_an_error_needs_no_arguments(kind: type[errors.GraderError]) -> None:
    assert str(kind()) == ""


def test_codes_differ() -> None:
    assert len({kind.code for kind in ALL}) == len(ALL)


def test_errors_are_also_the_builtin_that_fits() -> None:
    assert issubclass(errors.PresetError, ValueError)
    assert issubclass(errors.WriteFailed, OSError)
