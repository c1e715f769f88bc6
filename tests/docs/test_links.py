"""Links inside the documentation lead somewhere, and generated pages are up to date."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
PAGES = sorted(
    [*ROOT.glob("*.md"), *(ROOT / "docs").glob("*.md"), *(ROOT / "examples").rglob("*.md")]
)


def anchors(page: Path) -> set[str]:
    """The anchors that headings make."""
    headings = re.findall(r"^#+ (.+)$", page.read_text(encoding="utf-8"), re.M)
    return {
        re.sub(r"[^\w\- ]", "", heading).strip().lower().replace(" ", "-") for heading in headings
    }


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_links_resolve(page: Path) -> None:
    for target in re.findall(r"\]\(([^)\s]+)\)", page.read_text(encoding="utf-8")):
        if "://" in target:
            continue
        name, _, anchor = target.partition("#")
        other = (page.parent / name) if name else page
        assert other.exists(), f"{page.name}: {target}"
        if anchor:
            assert anchor in anchors(other), f"{page.name}: {target}"


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_files_named_in_the_text_exist(page: Path) -> None:
    named = re.findall(
        r"`((?:bayesglm|tests|docs|examples|\.ci)/[\w./-]+)`", page.read_text(encoding="utf-8")
    )
    for name in named:
        if "/X/" not in name:
            assert (ROOT / name).exists(), f"{page.name}: {name}"
