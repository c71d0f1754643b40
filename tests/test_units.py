"""Units: exact CODATA sizes, round trips, and one clear sentence for everything that is not a quantity."""

import math
import random
import re
import subprocess
import sys
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gutz.errors import InputError
from gutz.units import KINDS, format_quantity, from_si, parse_quantity, to_si

ALL_UNITS = [(kind, unit) for kind, entry in KINDS.items() for unit in entry.units]

# Exact by definition (SI 2019): h, k_B. CODATA 2022 for a0 and u, uncertain in the last digits only.
SIZES = [
    ("12.5 nm", "length", 12.5e-9, 1e-15),
    ("1 a0", "length", 5.29177210544e-11, 2e-9),
    ("1 u", "mass", 1.66053906892e-27, 2e-9),
    ("1 kHz", "energy", 6.62607015e-31, 1e-15),
    ("1 nK", "energy", 1.380649e-32, 1e-15),
    ("1 kHz", "frequency", 1e3, 0),
    ("30 uK", "temperature", 30e-6, 1e-15),
    ("30 \u00b5K", "temperature", 30e-6, 1e-15),
    ("30 \u03bcK", "temperature", 30e-6, 1e-15),
    ("1.5 k_B", "entropy", 1.5 * 1.380649e-23, 1e-15),
    ("15ms", "time", 15e-3, 1e-15),
    (" -1.5e2  % ", "number", -1.5, 1e-15),
    ("+.5 m", "length", 0.5, 0),
    ("7.", "number", 7.0, 0),
]


@pytest.mark.parametrize(("text", "kind", "expected", "tolerance"), SIZES)
def test_sizes_are_codata(text, kind, expected, tolerance):
    assert parse_quantity(text, kind, "x") == pytest.approx(expected, rel=tolerance, abs=0)


def test_one_nanokelvin_is_twenty_hertz():
    """k_B × 1 nK = h × 20.836619... Hz, from the exact constants of the SI (2019)."""
    exact = Fraction(1380649, 10**38) / Fraction(662607015, 10**42)
    assert from_si(parse_quantity("1 nK", "energy", "x"), "energy", "Hz") == pytest.approx(float(exact), rel=1e-15)


def test_bare_numbers_are_in_the_declared_unit():
    assert parse_quantity(1064, "length", "wavelength", unit="nm") == pytest.approx(1064e-9, rel=1e-15)
    assert parse_quantity("1064", "length", "wavelength", unit="nm") == pytest.approx(1064e-9, rel=1e-15)
    assert parse_quantity(np.float64(2.0), "length", "x") == 2.0
    assert parse_quantity(np.int32(2), "length", "x") == 2.0


def test_round_trip_to_four_ulp():
    """Lab unit -> SI -> lab unit, and lab -> SI -> in recoil energies -> SI -> lab, 10^4 random sets."""
    draw = random.Random(20240501)
    recoil = to_si(2027.8, "energy", "Hz")
    for _ in range(10_000):
        kind, unit = draw.choice(ALL_UNITS)
        value = draw.choice((-1, 1)) * draw.uniform(1, 10) * 10.0 ** draw.randint(-12, 12)
        si = parse_quantity(f"{value!r} {unit}", kind, "x")
        assert abs(from_si(si, kind, unit) - value) <= 4 * math.ulp(value)
        assert si == to_si(value, kind, unit) == parse_quantity(value, kind, "x", unit=unit)
        if kind == "energy":
            assert abs(from_si(si / recoil * recoil, kind, unit) - value) <= 4 * math.ulp(value)


def test_arrays_convert_like_numbers():
    values = np.array([[1.0, -2.0], [3.0, 0.0]])
    np.testing.assert_array_equal(
        to_si(values, "energy", "kHz")[0], [to_si(1.0, "energy", "kHz"), to_si(-2.0, "energy", "kHz")]
    )
    np.testing.assert_allclose(from_si(to_si(values, "energy", "nK"), "energy", "nK"), values, rtol=1e-15)


BAD = [
    (
        "12.5 mn",
        "length",
        'depth: got "12.5 mn", expected a length in m, cm, mm, um, nm, pm, a0; did you mean "nm"?',
    ),
    ("3 NK", "temperature", 'depth: got "3 NK", expected a temperature in nK, uK, mK, K; did you mean "nK"?'),
    ("3 kHz", "length", '"kHz" is a unit of energy.'),
    ("3 parsec", "time", '"parsec" is not a unit known here'),
    ("twelve", "length", "a number in m or text such as"),
    ("1e999 nm", "length", "must be finite"),
    ("nan", "number", 'a plain number or text such as "12 %".'),
    ("2*3 nm", "length", "a number in m or text such as"),
    ("__import__('os')", "number", 'a plain number or text such as "12 %".'),
    ("", "length", 'got ""'),
    (float("nan"), "length", "got nan, must be finite"),
    (float("inf"), "length", "got inf, must be finite"),
    (10**400, "length", "a whole number of more than 40 digits, must be finite"),
    (True, "number", "got True"),
    (None, "length", "got None"),
    ([1.0], "length", "got [1.0]"),
    (1 + 2j, "length", "got (1+2j)"),
    ("1e-320 nm", "length", "too small"),
    ("1e300 MHz", "frequency", None),
    (1e305, "frequency", "must be finite"),
]


@pytest.mark.parametrize(("value", "kind", "part"), BAD)
def test_bad_input_gets_one_sentence(value, kind, part):
    if part is None:  # large but representable: allowed, the field's own range decides
        assert math.isfinite(parse_quantity(value, kind, "depth"))
        return
    with pytest.raises(InputError) as caught:
        parse_quantity(value, kind, "depth", unit="MHz" if kind == "frequency" else None)
    message = str(caught.value)
    assert message.startswith("depth: got ")
    assert part in message
    assert "\n" not in message
    assert len(message) < 250


def test_unknown_kind_is_named():
    with pytest.raises(InputError, match='depth: got the kind "colour", must be one of length, mass'):
        parse_quantity(1.0, "colour", "depth")
    with pytest.raises(InputError, match="unit: got the kind"):
        format_quantity(1.0, "colour")


class _Hostile:
    def __repr__(self):
        raise RuntimeError


ANYTHING = st.one_of(
    st.text(),
    st.from_regex(r"\s?[+-]?[0-9.]{0,6}(e[+-]?[0-9]{1,4})?\s?[A-Za-zµμ0-9_/%]{0,4}", fullmatch=True),
    st.integers(),
    st.floats(),
    st.binary(),
    st.fractions(),
    st.decimals(),
    st.complex_numbers(),
    st.lists(st.integers()),
    st.just(10**6000),
    st.just(_Hostile()),
)


@settings(max_examples=500, derandomize=True, deadline=None)
@given(value=ANYTHING, kind=st.sampled_from(sorted(KINDS)))
def test_anything_gives_a_finite_float_or_an_input_error(value, kind):
    try:
        result = parse_quantity(value, kind, "x")
    except InputError as error:
        assert len(str(error)) < 400
    else:
        assert type(result) is float
        assert math.isfinite(result)


@pytest.mark.parametrize(
    ("value", "kind", "text"),
    [
        (1.06417e-6, "length", "1.064 \u00b5m"),
        (532e-9, "length", "532 nm"),
        (999.96e-9, "length", "1 \u00b5m"),
        (999.94e-9, "length", "999.9 nm"),
        (-3e-8, "temperature", "-30 nK"),
        (0.0, "temperature", "0 nK"),
        (6.62607015e-34 * 2027.8136, "energy", "2.028 kHz"),
        (1.44316060e-25, "mass", "86.91 u"),
        (1.380649e-23 * 0.5, "entropy", "0.5 k_B"),
        (0.25, "number", "0.25"),
        (math.nan, "energy", "undefined"),
        (math.inf, "energy", "infinite"),
        (-math.inf, "energy", "-infinite"),
    ],
)
def test_people_get_a_sensible_prefix(value, kind, text):
    assert format_quantity(value, kind) == text


def test_unit_can_be_forced():
    assert format_quantity(1064e-9, "length", unit="a0") == "2.011e+04 a0"
    assert format_quantity(12.3456e-6, "time", unit="us", digits=2) == "12 \u00b5s"
    with pytest.raises(InputError, match="unit: got"):
        format_quantity(1.0, "length", unit="furlong")


@settings(max_examples=200, derandomize=True, deadline=None)
@given(value=st.floats(1e-12, 1e12), kind=st.sampled_from(sorted(KINDS)))
def test_what_is_written_can_be_read_back(value, kind):
    value *= KINDS[kind].units[KINDS[kind].shown[0]]
    assert parse_quantity(format_quantity(value, kind), kind, "x") == pytest.approx(value, rel=5.1e-4)


def test_names_of_units_are_unambiguous():
    for entry in KINDS.values():
        assert entry.units[entry.default] == 1.0
        assert all(re.fullmatch(r"\S+", unit) for unit in entry.units)
        sizes = [entry.units[unit] for unit in entry.shown]
        assert sizes == sorted(sizes)


def test_importing_stays_light():
    heavy = ("jax", "scipy.special", "scipy.linalg", "scipy.optimize", "xarray")
    code = f"import sys, gutz.units, gutz.optics; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
