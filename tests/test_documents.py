"""What the document tests compare with is itself tested: a comparison that cannot fail proves nothing."""

from __future__ import annotations

import pytest

from documents import PAGES, Block, Session, compare

PRINTED = "bracket.vtu   704 cells\nlargest  836\n  where  element 5257 (cell 256)\n  at x, y, z  0.1, 0.2, 0.3\nend\n"


@pytest.mark.derived("the rules in the docstring of compare")
@pytest.mark.parametrize(
    "shown",
    [
        PRINTED,
        "bracket.vtu 704 cells\n...\nend",
        "...\nlargest 839\n  where element 1 (cell 2)\n  at x, y, z 9, 9, 9\n...",
        "...",
    ],
)
def test_the_same_output_is_the_same(shown: str) -> None:
    assert compare(shown, PRINTED) == ""


@pytest.mark.derived("the rules in the docstring of compare")
@pytest.mark.parametrize(
    "shown",
    [
        PRINTED.replace("836", "870"),
        PRINTED.replace("largest", "smallest"),
        PRINTED.replace("end", ""),
        PRINTED + "more",
        "...\nlargest 836",
        "largest 836\n...",
        "...\nlargest -836\n...",
        "...\nend\n...\nlargest 836\n...",
    ],
)
def test_another_output_is_another(shown: str) -> None:
    assert compare(shown, PRINTED) != ""


@pytest.mark.derived("an example is run, or it is an error")
def test_a_block_that_nobody_runs_is_an_error() -> None:
    with pytest.raises(AssertionError, match="neither run nor compared"):
        Session(PAGES[0]).play(Block("bash", "true", 1))
    with pytest.raises(AssertionError, match="only unturn commands"):
        Session(PAGES[0]).play(Block("sh", "ls", 1))
    with pytest.raises(AssertionError, match="exit status 3"):
        Session(PAGES[0]).play(Block("sh", "unturn survey no-such-file.vtu", 1))
