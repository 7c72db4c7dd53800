"""The air: what is accepted, what is refused, and what the user is told."""

import warnings

import pytest

from viewshed.atmosphere import Refraction, apart_m, parse_refraction
from viewshed.errors import InputError, ViewshedWarning


@pytest.mark.parametrize(
    ("text", "k"),
    [
        ("0.13", 0.13),
        (0.13, 0.13),
        (0, 0.0),
        (" .2 ", 0.2),
        ("-0.5", -0.5),
        ("1.3e-1", 0.13),
        ("k=0.13", 0.13),
        ("k = 0.075", 0.075),
        ("k=0.9", 0.9),
        ("k=-1", -1.0),
        ("K=4/3", 0.25),
        ("K=1.25", 0.2),
        ("K=1", 0.0),
        ("K=0.5", -1.0),
        ("m=0.075", 0.15),
        ("m=-0.1", -0.2),
        ("none", 0.0),
        ("survey", 0.13),
        ("Radio", 0.25),
        ("0.05", 0.05),
        ("0.0901", 0.0901),
        ("0.5", 0.5),
    ],
)
def test_accepted_without_a_warning(text, k):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert parse_refraction(text).k == pytest.approx(k, abs=1e-15)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("1.333", ("1.333", "write K=1.333", "0.24981")),
        ("4/3", ("K=1.3333", "k = 0.25")),
        ("1", ("K=1", "K=4/3")),
        ("k=1.2", ("1.2", "write K=1.2")),
        ("m=0.5", ("m=0.5", "k = 1")),
        ("m=0.87", ("m=0.87", "K=0.87")),
        ("K=0.49", ("K=0.49", "at least 0.5", "k=0.49")),
        ("K=0.13", ("K=0.13", "k=0.13")),
        ("K=-3", ("K=-3", "at least 0.5")),
        ("K=1e300", ("K=1",)),
        ("-1.01", ("-1.01", "below 0.5")),
        ("k=-2", ("-2", "0.33333")),
        ("nan", ("'nan'", "finite", "survey")),
        ("k=inf", ("'k=inf'", "finite")),
        ("-Infinity", ("'-Infinity'", "finite")),
        ("1e999", ("'1e999'", "finite")),
        ("K=1/0", ("'K=1/0'", "finite")),
        (float("nan"), ("nan", "finite")),
        (float("inf"), ("inf", "finite")),
        ("0,13", ("'0,13'", "point")),
        ("thick", ("'thick'", "survey")),
        ("", ("''", "survey")),
        ("n=0.1", ("'n=0.1'", "survey")),
        ("k=", ("'k='", "survey")),
        ("k=0.1=2", ("'k=0.1=2'",)),
        ("1_0", ("'1_0'",)),
        (None, ("None",)),
        (True, ("True",)),
    ],
)
def test_refused_in_one_line_that_echoes_the_value_and_names_the_cure(text, words):
    with pytest.raises(InputError) as caught:
        parse_refraction(text)
    message = str(caught.value)
    assert "\n" not in message
    for word in words:
        assert word in message


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("0.075", ("k = 0.075 is unusual", "m=0.075 (k = 0.15)", "5 m apart at 30 km", "k=0.075")),
        (0.06, ("m=0.06", "k = 0.12")),
        ("0.09", ("m=0.09", "k = 0.18")),
        ("0.87", ("1 - k = 0.87", "k=0.13", "52 m apart at 30 km", "K=0.87")),
        ("0.51", ("k=0.49", "K=0.51", "k=0.51")),
    ],
)
def test_bare_values_that_look_like_another_convention_warn(text, words):
    with pytest.warns(ViewshedWarning) as caught:
        refraction = parse_refraction(text)
    assert refraction.k == float(text)
    (warning,) = caught
    assert "\n" not in str(warning.message)
    for word in words:
        assert word in str(warning.message)


def test_the_metres_in_the_warning_are_those_of_the_drop():
    assert apart_m(0.075, 0.15) == pytest.approx(5.297, abs=1e-3)
    assert apart_m(0.87, 0.13) == pytest.approx(52.27, abs=0.01)
    assert apart_m(0.2, 0.1, 60_000.0) == pytest.approx(4 * apart_m(0.1, 0.2))


def test_the_three_forms_agree_and_are_told():
    air = parse_refraction("K=4/3")
    assert (air.k, air.K, air.m) == pytest.approx((0.25, 4 / 3, 0.125))
    assert air.describe() == "k = 0.25 (K = 1.333)"
    assert Refraction(0.13, "survey").describe() == "k = 0.13 (K = 1.149)"
    assert Refraction(-0.0, "given").describe() == "k = 0 (K = 1)"


@pytest.mark.parametrize("k", [1.0, 2.5, -1.0001, float("nan"), float("-inf"), "0.13", True])
def test_no_refraction_object_holds_a_refused_value(k):
    with pytest.raises(InputError):
        Refraction(k, "given")


def test_where_the_value_came_from_is_kept():
    origins = [parse_refraction(t).origin for t in ("survey", "k = 0.2", "K=4/3", "0.13")]
    assert origins == ["survey", "k=0.2", "K=4/3", "0.13"]
