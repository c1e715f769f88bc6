"""The hint at what was meant."""

import pytest

from bayesglm.errors import InputError, nearest


@pytest.mark.parametrize(
    ("word", "hint"),
    [
        ("curent", "; did you mean 'current'?"),
        ("voltage", "; did you mean 'voltage'?"),
        ("xyz", ""),
    ],
)
def test_nearest(word: str, hint: str) -> None:
    assert nearest(word, ["current", "voltage"]) == hint


def test_nearest_of_nothing() -> None:
    assert nearest("current", []) == ""


def test_input_error_is_a_value_error() -> None:
    with pytest.raises(ValueError, match="one line"):
        raise InputError("one line")
