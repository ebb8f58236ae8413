"""Errors are one line and say everything; numbers are checked whatever their type."""

import copy
import pickle
from fractions import Fraction

import numpy as np
import pytest

from hyperforecast.checks import InputError, check_choice, check_keys, check_number, check_whole

NO_REALS = [None, "1", "", b"1", True, False, [1], np.nan, -np.nan, np.inf, -np.inf, 1j, np.array([1.0]), object(),
            10**400, -10**400, 1 << 20_000]


def kind(value):
    """Name of a case; the numbers themselves may be too long to write."""
    return type(value).__name__


def test_an_error_says_parameter_rule_value_and_remedy_in_one_line():
    error = InputError("memory_limit", "must be enough", 3, "raise it")
    assert str(error) == "memory_limit: must be enough; received 3; raise it"
    assert (error.parameter, error.rule, error.received, error.remedy) == (
        "memory_limit", "must be enough", "3", "raise it")
    assert str(InputError("a", "must be b", "c")) == "a: must be b; received c"
    assert isinstance(error, ValueError)


@pytest.mark.parametrize("hostile", ["two\nlines", "\x1b[31mred\x1b[0m",
                                     "\r\x85\u2028\x0b\x00", "\ud800", "\u202eback"])
def test_an_error_stays_one_printable_line_whatever_it_tells(hostile):
    line = str(InputError(hostile, f"must not be {hostile}", hostile, hostile))
    assert line.isprintable() and len(line.splitlines()) == 1
    line.encode()


def test_long_values_are_cut():
    assert len(str(InputError("X", "must be short", "x" * 10_000))) < 300


def test_an_error_survives_copying_and_worker_processes():
    error = InputError("a.npz", "must be complete", "half", "copy it again")
    for other in (copy.copy(error), pickle.loads(pickle.dumps(error))):
        assert type(other) is InputError and str(other) == str(error) and vars(other) == vars(error)


@pytest.mark.parametrize("value", [2, 2.0, np.float32(2), np.int8(2), np.float64(2), Fraction(2)])
def test_a_number_of_any_kind_comes_back_as_a_float(value):
    number = check_number("a", value, low=2, high=2)
    assert type(number) is float and number == 2.0


@pytest.mark.parametrize("value", NO_REALS + [1.999, 5.001, np.float32(1.5)], ids=kind)
def test_other_numbers_are_refused(value):
    with pytest.raises(InputError, match="^a: must be a number from 2 to 5; received "):
        check_number("a", value, low=2, high=5)


@pytest.mark.parametrize("value", NO_REALS, ids=kind)
def test_a_number_without_limits_is_finite_still(value):
    with pytest.raises(InputError, match="^a: must be a number from -inf to inf; received .*; mend it$"):
        check_number("a", value, remedy="mend it")


@pytest.mark.parametrize("value", [0, 7, np.int64(7), np.uint8(7), 10**30])
def test_whole_numbers_come_back_as_int(value):
    number = check_whole("a", value)
    assert type(number) is int and number == value


@pytest.mark.parametrize("value", [one for one in NO_REALS if not isinstance(one, int) or isinstance(one, bool)]
                         + [1, 6, 2.0, np.float64(3), 10**400, -(1 << 20_000)], ids=kind)
def test_other_whole_numbers_are_refused(value):
    with pytest.raises(InputError, match="^a: must be a whole number from 2 to 5; received "):
        check_whole("a", value, low=2, high=5)


def test_a_whole_number_may_have_no_upper_limit():
    with pytest.raises(InputError, match="^a: must be a whole number of at least 1; received 0$"):
        check_whole("a", 0, low=1)


@pytest.mark.parametrize("value", ["c", "", "A", None, 1, ["a"], np.array(["a"])])
def test_a_choice_is_one_of_those_offered(value):
    assert check_choice("letter", "b", ("a", "b")) == "b"
    with pytest.raises(InputError, match="^letter: must be one of a, b; received "):
        check_choice("letter", value, ("a", "b"))


def test_a_misspelt_key_is_refused():
    check_keys("stream", {"name": 1}, ("name", "seed"))
    with pytest.raises(InputError, match="^stream: knows the keys name, seed; received 'sed'; correct or remove it$"):
        check_keys("stream", {"name": 1, "sed": 2}, ("name", "seed"))
