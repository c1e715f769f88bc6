from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_fit import CAUTION, FAILED, PASSED, renamed, with_reasons

from bayesglm.inference.results import CellFit, DriveRange, Feature, Split
from bayesglm.report import wording

NAN = float("nan")


def eta(mean: float, sd: float, lower: float, upper: float, lag: str = "30") -> Feature:
    name = f"after_spike_at_{lag}ms"
    return Feature(name, "mV", mean, sd, lower, upper, NAN, NAN, NAN, 0.9, 900.0, 0.01)


def with_eta(fit: CellFit, feature: Feature, *ranges: tuple[str, float]) -> CellFit:
    blank = (np.zeros(1), np.zeros(1))
    parts = tuple(
        DriveRange(label, np.arange(1), blank, {feature.name: (mean, 0.5)})
        for label, mean in ranges
    )
    split = Split("after_spike", parts, 3.0)
    return replace(fit, features=(feature,), splits={"after_spike": split})


@pytest.mark.parametrize(
    ("sd", "value", "expected"),
    [
        (0.6, -4.3, 1),
        (0.29, -4.3, 2),
        (0.31, -4.3, 1),
        (1.0, 98.0, 1),
        (3.2, 98.0, 0),
        (25.0, 412.0, 0),
        (250.0, 4120.0, -1),
        (700.0, 4120.0, -2),
        (1e-6, 0.1, 3),
        (0.0, 5.5, 1),
        (NAN, 0.03, 2),
        (0.0, 1e-9, 0),
        (NAN, NAN, 0),
    ],
)
def test_the_sd_decides_the_digits(sd: float, value: float, expected: int) -> None:
    assert wording.decimals(sd, value) == expected


@pytest.mark.parametrize(
    ("value", "places", "expected"),
    [
        (-4.31, 1, "−4.3"),
        (-0.04, 1, "0.0"),
        (4123.0, -1, "4120"),
        (-4123.0, -2, "−4100"),
        (NAN, 1, "–"),
    ],
)
def test_numbers_have_a_true_minus_and_no_negative_zero(
    value: float, places: int, expected: str
) -> None:
    assert wording.rounded(value, places) == expected


def test_an_interval_that_does_not_exist_is_a_dash() -> None:
    assert wording.interval(NAN, 1.0, 1) == "–"
    assert wording.interval(-5.25, -3.349, 1) == "−5.2 to −3.3"


@pytest.mark.parametrize(
    ("value", "expected"),
    [(0.0, "below 0.01"), (1.0, "above 0.99"), (0.034, "0.03"), (0.5, "0.50")],
)
def test_a_probability_is_never_zero_or_one(value: float, expected: str) -> None:
    assert wording.probability(value) == expected


@pytest.mark.parametrize(
    ("feature", "ranges", "expected"),
    [
        (
            eta(-4.3, 0.6, -5.3, -3.3),
            (("50–125 pA", -0.1), ("150–225 pA", -4.0), ("250–300 pA", -5.3)),
            "30 ms after a spike the membrane is pulled down by 4.3 mV (90 % interval 3.3 to 5.3; "
            "under this protocol; η −0.1 mV at 50–125 pA, −5.3 mV at 250–300 pA).",
        ),
        (
            eta(2.04, 0.15, 1.8, 2.28),
            (),
            "30 ms after a spike the membrane is lifted by 2.04 mV (90 % interval 1.80 to 2.28; "
            "under this protocol).",
        ),
        (
            eta(-0.2, 0.3, -0.6, 0.3, lag="12.5"),
            (),
            "12.5 ms after a spike it is open whether the membrane is pulled down or lifted: "
            "−0.2 mV (90 % interval −0.6 to 0.3; under this protocol).",
        ),
        (
            eta(-4.3, 0.6, -5.3, -3.3),
            (("50–125 pA", -2.0), ("150–225 pA", -6.0), ("250–300 pA", -3.0)),
            "30 ms after a spike the membrane is pulled down by 4.3 mV (90 % interval 3.3 to 5.3; "
            "under this protocol; η −2.0 mV at 50–125 pA, −6.0 mV at 150–225 pA, "
            "−3.0 mV at 250–300 pA).",
        ),
    ],
)
def test_sentences_after_a_spike(
    fit: CellFit, feature: Feature, ranges: tuple[tuple[str, float], ...], expected: str
) -> None:
    assert wording.result_sentences(with_eta(fit, feature, *ranges)) == [expected]


def test_every_result_carries_its_interval_and_its_protocol(fit: CellFit) -> None:
    sentences = wording.result_sentences(fit)
    assert len(sentences) == 4
    for sentence in sentences[:3]:
        assert "90 % interval" in sentence
        assert "under this protocol" in sentence
    assert sentences[3].startswith("The probability that η rises above 0.25 mV")
    assert not any("signific" in sentence for sentence in sentences)


def test_without_an_after_spike_kernel_only_the_input_is_told(quiet_fit: CellFit) -> None:
    assert len(wording.result_sentences(quiet_fit)) == 2


@pytest.mark.parametrize(
    ("check", "expected"),
    [
        ("rhat", "R̂"),
        ("effective_draws", "Effective draws"),
        ("drive_split_after_spike", "Ranges of drive, η"),
        ("odd_even_input", "Odd against even units, κ"),
        ("something_new", "Something new"),
    ],
)
def test_checks_are_named_in_words(check: str, expected: str) -> None:
    assert wording.check_label(check) == expected


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("peaks of at least -10 mV", "peaks of at least −10 mV"),
        ("after-spike, sweep-3, 2021-03", "after-spike, sweep-3, 2021-03"),
        ("normal(-65, 20)", "normal(−65, 20)"),
    ],
)
def test_only_the_sign_of_a_number_becomes_a_minus(text: str, expected: str) -> None:
    assert wording.true_minus(text) == expected


def test_a_feature_with_its_interval() -> None:
    assert wording.with_interval(eta(-4.3, 0.6, -5.3, -3.3)) == (
        "−4.3 mV (90 % interval −5.3 to −3.3)"
    )


def test_the_verdict_in_words(fit: CellFit) -> None:
    sentence = wording.verdict_sentence
    assert sentence(with_reasons(fit, PASSED)) == "Every check is within its limit."
    assert "1 reservation," in sentence(with_reasons(fit, PASSED, CAUTION))
    assert "Do not use" in sentence(with_reasons(fit, CAUTION, FAILED))


def test_the_study_in_words(fit: CellFit) -> None:
    passed, failed = with_reasons(fit, PASSED), with_reasons(renamed(fit, "b"), FAILED)
    assert wording.study_sentence([passed, passed]) == "All 2 cells passed."
    assert wording.study_sentence([passed, failed, passed]) == ("Of 3 cells 2 passed and 1 failed.")


def test_features_without_a_name_of_their_own_keep_their_words() -> None:
    assert wording.feature_label("after_spike_at_12.5ms") == "η at 12.5 ms after a spike"
    assert wording.feature_label("rest_rate") == "Rest rate"
