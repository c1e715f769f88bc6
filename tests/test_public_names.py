"""The package's public names are those of the guide, and each can be imported."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

import bayesglm

ROOT = Path(__file__).resolve().parents[1]


def guide_names() -> list[str]:
    """Names in the first column of the guide's table of public names."""
    text = (ROOT / "docs" / "guide.md").read_text(encoding="utf-8")
    rows = text.partition("\n| name | is |\n")[2].partition("\n\n")[0].splitlines()[1:]
    return [name for row in rows for name in re.findall(r"`(\w+)`", row.split("|")[1])]


def test_the_guide_lists_every_public_name_once() -> None:
    assert sorted(guide_names()) == sorted(bayesglm.__all__)


@pytest.mark.parametrize("name", bayesglm.__all__)
def test_each_name_is_there_and_says_what_it_is(name: str) -> None:
    value = getattr(bayesglm, name)
    assert value.__name__ == name
    assert (value.__doc__ or "").strip()


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'absent'"):
        bayesglm.absent  # noqa: B018


def test_importing_the_package_loads_nothing_heavy() -> None:
    code = "import bayesglm, sys; print(*sorted({'jax', 'numpyro', 'pandas'} & set(sys.modules)))"
    printed = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, check=True
    )
    assert printed.stdout.decode().strip() == ""
