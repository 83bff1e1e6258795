import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.replies import parse_number
from drivers.templates import fill, placeholders

WORDS = {"polarity": {"normal": "NORM", "inverted": "INV"}}


@pytest.mark.parametrize(
    ("template", "value", "text"),
    [
        ("SOUR:VOLT {x}", 12.0, "SOUR:VOLT 12"),
        ("SOUR:VOLT {x}", 0.1, "SOUR:VOLT 0.1"),
        ("SOUR:VOLT {x}", 0.1 + 0.2, "SOUR:VOLT 0.3"),  # nine digits hide the binary dust
        ("SENS:SWE:TINT {x}", 1e-8, "SENS:SWE:TINT 1e-08"),
        ("SENS:SWE:POIN {x}", 2000, "SENS:SWE:POIN 2000"),
        ("SENS:SWE:POIN {x:d}", 2000.0, "SENS:SWE:POIN 2000"),
        ("S={x:.2f}", 85.0, "S=85.00"),
        ("S={x:+07.2f}", -40.0, "S=-040.00"),
        ("W{x/1e-6:.3f}US", 2.5e-6, "W2.500US"),
        ("K {x+273.15:.2f}", 25.0, "K 298.15"),
        ("OFFS {x*-1}", 200, "OFFS -200"),
        ("OFFS {x*-1}", 0, "OFFS 0"),
        ("V {x:.1f}", -0.0, "V 0.0"),
        ("CLOS (@{x})", (101, 201), "CLOS (@101,201)"),
        ("POL {polarity}", "inverted", "POL INV"),
    ],
)
def test_a_placeholder_is_filled(template: str, value, text: str) -> None:
    assert fill(template, {"x": value, "polarity": value}, WORDS) == text


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_nothing_that_is_not_finite_is_ever_sent(value: float) -> None:
    with pytest.raises(ValueError, match="x must be a finite number"):
        fill("SOUR:VOLT {x}", {"x": value}, {})


@pytest.mark.parametrize(
    "template", ["{", "}", "{x", "{}", "{x!r}", "{x:s}", "{x:>9}", "{x y}", "{x*}", "{{x}}"]
)
def test_a_brace_that_is_no_placeholder_is_found_beforehand(template: str) -> None:
    with pytest.raises(ValueError, match="write"):
        placeholders(template)


def test_the_names_of_a_template_are_listed_in_order() -> None:
    assert placeholders("A {voltage:.3f};B {current/1e-3},{voltage}") == ("voltage", "current", "voltage")


@given(st.floats(-1e12, 1e12).filter(lambda x: x == 0 or abs(x) > 1e-12))
def test_numbers_in_messages_read_back_to_nine_digits(value: float) -> None:
    # .9g keeps nine significant digits: half a unit of the ninth is at most 5e-9 of the number.
    assert parse_number(fill("{x}", {"x": value}, {})) == pytest.approx(value, rel=5.0001e-9, abs=0)


@given(st.floats(1e-9, 1.0))
def test_another_unit_reads_back_with_the_same_factor(width: float) -> None:
    sent = fill("{x/1e-6:.6f}", {"x": width}, {})
    assert parse_number(sent) * 1e-6 == pytest.approx(
        width, abs=0.51e-12
    )  # half of the last decimal, in seconds
