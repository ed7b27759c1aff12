"""Controller forms against published vectors, hand arithmetic and their own inverses."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gainwright.errors import ConversionImpossible, OutOfDomain
from gainwright.forms import ControllerForm, Setting, gains_of, hand_check, ideal_to_series, settings_of
from gainwright.gains import Gains
from gainwright.rules import series_to_ideal

PERCENT = ControllerForm(
    "ideal", "percent_per_percent", input_low=0.0, input_high=120.0, output_low=0.0, output_high=100.0
)
ENGINEERING = ControllerForm("ideal", "engineering", input_unit="degC", output_unit="%")


def shown(gains: Gains, form: ControllerForm) -> dict[str, tuple[float, str]]:
    return {s.name: (pytest.approx(s.value), s.unit) for s in settings_of(gains, form)}


def test_percent_per_percent_is_scaled_by_the_controllers_own_ranges() -> None:
    # Normalised gain = gain in engineering units times input span over output span (from memory): 2 %/degC over
    # 120 degC and 100 %.
    assert shown(Gains(2.0, 90.0, 15.0), PERCENT) == {"K": (2.4, "%/%"), "Ti": (90.0, "s"), "Td": (15.0, "s")}


def test_engineering_units_stand_beside_the_number() -> None:
    assert shown(Gains(2.0, 90.0), ENGINEERING) == {"K": (2.0, "%/degC"), "Ti": (90.0, "s")}


def test_the_ideal_and_parallel_forms_of_the_heater_example_agree() -> None:
    # Kantor, CBE 30338, notebook 04.06 (Notre Dame): Kp 8.4926, Ti 70 s, Td 17.5 s; Ki 0.12132, Kd 148.62.
    parallel = replace(ENGINEERING, form="parallel")
    found = settings_of(Gains(8.4926, 70.0, 17.5), parallel)
    assert [s.name for s in found] == ["Kp", "Ki", "Kd"]
    assert [s.value for s in found] == pytest.approx([8.4926, 0.12132, 148.62], rel=5e-5)
    assert [s.unit for s in found] == ["%/degC", "%/degC per s", "%/degC s"]


def test_minutes_and_repeats_are_sixty_seconds() -> None:
    gains = Gains(2.0, 90.0, 15.0)
    minutes = replace(ENGINEERING, integral_unit="min", derivative_unit="min")
    assert shown(gains, minutes) == {"K": (2.0, "%/degC"), "Ti": (1.5, "min"), "Td": (0.25, "min")}
    assert shown(gains, replace(minutes, form="parallel")) == {
        "Kp": (2.0, "%/degC"),
        "Ki": (2.0 / 1.5, "%/degC per min"),
        "Kd": (0.5, "%/degC min"),
    }
    assert shown(gains, replace(minutes, integral_unit="repeats_per_min"))["reset"] == (60 / 90, "repeats/min")
    assert shown(gains, replace(minutes, integral_unit="repeats_per_s"))["reset"] == (1 / 90, "repeats/s")


def test_a_proportional_band_is_a_hundred_over_the_gain_in_percent() -> None:
    assert shown(Gains(2.0), replace(PERCENT, gain="proportional_band")) == {"PB": (100 / 2.4, "%")}


# Ideal against series form (Astrom & Hagglund 1995; from memory, round trip recomputed).
SERIES = [
    ((1, 10, 2), (0.7236068, 7.236068, 2.763932)),
    ((1, 8, 2), (0.5, 4, 4)),
    ((1, 10, 1), (0.8872983, 8.872983, 1.127017)),
]


@pytest.mark.parametrize(("ideal", "series"), SERIES)
def test_the_series_form_meets_its_vectors_both_ways(
    ideal: tuple[float, float, float], series: tuple[float, float, float]
) -> None:
    assert ideal_to_series(Gains(*ideal)) == pytest.approx(series, rel=5e-7)
    back = series_to_ideal(*series)
    assert (back.proportional_gain, back.integral_time, back.derivative_time) == pytest.approx(ideal, rel=5e-7)


def test_ziegler_nichols_is_the_border_case_of_the_series_form() -> None:
    # K' = 0.3 Ku, Ti' = Td' = Tu/4 (from memory).
    assert ideal_to_series(Gains(0.6, 0.5, 0.125)) == pytest.approx((0.3, 0.25, 0.25))
    assert ideal_to_series(Gains(0.6 * 7.3, 0.5 * 1.1, 1.1 / 8)) == pytest.approx((0.3 * 7.3, 0.275, 0.275), rel=1e-5)


@pytest.mark.parametrize(("integral", "derivative"), [(0.4, 0.15), (0.5, 1 / 3)])
def test_gains_with_too_much_derivative_do_not_go_into_a_series_controller(integral: float, derivative: float) -> None:
    # Pessen, and "some overshoot" and "no overshoot".
    with pytest.raises(ConversionImpossible, match="4 Td"):
        settings_of(Gains(1.0, integral, derivative), replace(ENGINEERING, form="series"))


FORMS = st.builds(
    ControllerForm,
    st.sampled_from(["ideal", "parallel", "series"]),
    st.sampled_from(["percent_per_percent", "engineering", "proportional_band"]),
    st.sampled_from(["s", "min", "repeats_per_s", "repeats_per_min"]),
    st.sampled_from(["s", "min"]),
    st.floats(-300, 0),
    st.floats(1, 2000),
    st.floats(-10, 0),
    st.floats(1, 100),
).filter(
    lambda f: f.form != "parallel" or (f.gain != "proportional_band" and not f.integral_unit.startswith("repeats"))
)


@settings(max_examples=300, deadline=None)
@given(
    form=FORMS,
    gain=st.floats(1e-4, 1e4),
    integral=st.floats(1e-2, 1e5) | st.just(math.inf),
    share=st.floats(1e-3, 0.24) | st.just(0.0),
)
def test_every_conversion_round_trips(form: ControllerForm, gain: float, integral: float, share: float) -> None:
    derivative = share * integral if math.isfinite(integral) else share
    gains = Gains(gain, integral, derivative, 7.0)
    back = gains_of(settings_of(gains, form), form, derivative_filter_n=7.0)
    assert (back.proportional_gain, back.integral_time, back.derivative_time) == pytest.approx(
        (gain, integral, derivative), rel=1e-9
    )
    assert hand_check(gains, form)


@given(gain=st.floats(1e-3, 1e3), integral=st.floats(0.1, 1e4), share=st.floats(0.01, 0.25))
def test_all_forms_describe_one_controller(gain: float, integral: float, share: float) -> None:
    gains = Gains(gain, integral, share * integral, math.inf)
    k, ti, td = ideal_to_series(gains)
    s = 1j * 0.37
    assert complex(gains.response(0.37)) == pytest.approx(k * (1 + 1 / (ti * s)) * (1 + td * s), rel=1e-7)


@pytest.mark.parametrize(
    ("gains", "form", "sentence"),
    [
        (
            Gains(2.0, 95.0),
            PERCENT,
            "a 1 % error step moves the output 2.4 % at once and 2.4 % more every 95 s",
        ),
        (
            Gains(2.0, 95.0, 10.0),
            replace(PERCENT, form="parallel", integral_unit="min"),
            "a 1 % error step moves the output 2.4 % at once and 2.4 % more every 95 s",
        ),
        (
            Gains(0.5),
            ENGINEERING,
            "an error step of 1 degC moves the output 0.5 % at once and no further",
        ),
        (
            Gains(1.0, 8.0, 2.0),
            replace(ENGINEERING, form="series"),
            "an error step of 1 degC moves the output 0.5 % at once and 0.5 % more every 4 s",
        ),
        (
            Gains(2.0, 95.0, 10.0),
            replace(PERCENT, derivative_on="error"),
            "a 1 % error step moves the output 2.4 % at once and 2.4 % more every 95 s, "
            "and the derivative kicks it by 24 %, gone after 3 s",
        ),
    ],
)
def test_the_hand_check_says_what_the_faceplate_shows(gains: Gains, form: ControllerForm, sentence: str) -> None:
    assert hand_check(gains, form) == sentence


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"input_low": None}, "controller.input_low"),
        ({"input_high": None}, "controller.input_high"),
        ({"output_high": None}, "controller.output_high"),
        ({"input_low": 120.0}, "controller.input_low"),
        ({"output_high": math.inf}, "controller.output_low"),
        ({"output_low": math.nan}, "controller.output_low"),
        ({"form": "mystery"}, "controller.form"),
        ({"gain": "decibel"}, "controller.gain"),
        ({"integral_unit": "h"}, "controller.integral_unit"),
        ({"derivative_unit": "ms"}, "controller.derivative_unit"),
        ({"form": "parallel", "integral_unit": "repeats_per_min"}, "controller.integral_unit"),
        ({"form": "parallel", "gain": "proportional_band"}, "controller.gain"),
    ],
)
def test_an_undeclared_or_contradictory_form_prints_nothing(change: dict[str, object], field: str) -> None:
    form = replace(PERCENT, **change)
    for call in (lambda: settings_of(Gains(1.0, 1.0), form), lambda: hand_check(Gains(1.0, 1.0), form)):
        with pytest.raises(ConversionImpossible) as caught:
            call()
        assert caught.value.field == field
        assert caught.value.allowed


@pytest.mark.parametrize(
    "numbers",
    [
        {},
        {"Ti": 1.0},
        {"K": 1.0, "Ki": 2.0},
        {"K": 0.0},
        {"K": -1.0},
        {"K": math.nan},
        {"K": 1.0, "Ti": -5.0},
        {"K": 1.0, "Td": math.inf},
    ],
)
def test_entered_numbers_that_are_no_gains_are_refused(numbers: dict[str, float]) -> None:
    with pytest.raises(ConversionImpossible):
        gains_of(tuple(Setting(name, value, "") for name, value in numbers.items()), ENGINEERING)


def test_a_zero_integral_or_derivative_number_means_without() -> None:
    entered = (Setting("Kp", 2.0, ""), Setting("Ki", 0.0, ""), Setting("Kd", 0.0, ""))
    gains = gains_of(entered, replace(ENGINEERING, form="parallel"))
    assert gains == Gains(2.0)


@pytest.mark.parametrize(
    ("arguments", "field"),
    [
        ((0.0,), "proportional_gain"),
        ((-1.0,), "proportional_gain"),
        ((math.inf,), "proportional_gain"),
        ((math.nan,), "proportional_gain"),
        ((1.0, 0.0), "integral_time"),
        ((1.0, math.nan), "integral_time"),
        ((1.0, 1.0, -1.0), "derivative_time"),
        ((1.0, 1.0, math.inf), "derivative_time"),
        ((1.0, 1.0, 1.0, 0.0), "derivative_filter_n"),
    ],
)
def test_gains_outside_their_domain_are_named(arguments: tuple[float, ...], field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        Gains(*arguments)
    assert caught.value.field == field


def test_the_response_of_the_gains_meets_the_published_number() -> None:
    # K = 2, Ti = 10, Td = 2, N = 10 at 0.7 rad/s: 2.38446 + 2.46046j (recomputed).
    assert complex(Gains(2.0, 10.0, 2.0, 10.0).response(0.7)) == pytest.approx(2.38446 + 2.46046j, abs=6e-6)
