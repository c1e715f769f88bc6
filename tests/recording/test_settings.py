"""Defaults and limits of the settings."""

import pytest
from pydantic import ValidationError

from bayesglm.recording.settings import Section, Settings


def sections(section: type[Section] = Settings) -> list[type[Section]]:
    found = [section]
    for field in section.model_fields.values():
        kind = field.annotation
        if isinstance(kind, type) and issubclass(kind, Section):
            found += sections(kind)
    return found


def test_defaults_of_the_design() -> None:
    settings = Settings()
    assert settings.model.spike_window_ms == (-1.0, 5.0)
    assert (settings.sampling.chains, settings.sampling.warmup, settings.sampling.draws) == (
        4,
        300,
        500,
    )
    assert settings.kernels.input.weights is None
    assert settings.kernels.after_spike.report_at_ms == (30.0,)
    assert settings.recording.spike_height_mV == -10.0


def test_every_key_has_a_meaning() -> None:
    missing = [
        f"{section.__name__}.{name}"
        for section in sections()
        for name, field in section.model_fields.items()
        if section is not Settings and not field.description
    ]
    assert missing == []


def test_survives_a_round_trip() -> None:
    settings = Settings()
    assert Settings.model_validate_json(settings.model_dump_json(), strict=True) == settings


def test_is_frozen() -> None:
    with pytest.raises(ValidationError, match="frozen"):
        Settings().sampling.seed = 3  # type: ignore[misc]


@pytest.mark.parametrize(
    ("data", "message"),
    [
        ({"sampling": {"sead": 1}}, "Extra inputs are not permitted"),
        ({"sampling": {"level": 1.0}}, "less than 1"),
        ({"kernels": {"input": {"weights": 4}}}, "greater than or equal to 5"),
        ({"model": {"spike_window_ms": (1.0, 5.0)}}, r"expected \[≤ 0, > 0\] in ms"),
        ({"priors": {"input_sd": float("inf")}}, "finite number"),
    ],
)
def test_limits(data: dict[str, object], message: str) -> None:
    with pytest.raises(ValidationError, match=message):
        Settings.model_validate(data)
