"""Reports as a browser shows them; these run where a browser and its driver are installed."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from documents import ROOT, run

playwright = pytest.importorskip("playwright.sync_api")
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")

pytestmark = [
    pytest.mark.skipif(CHROMIUM is None, reason="no Chromium"),
    pytest.mark.source("what Chromium says of a page"),
]


@pytest.fixture(scope="module")
def report(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The report on the sample bracket."""
    folder = tmp_path_factory.mktemp("browser")
    for sample in (ROOT / "sample_meshes").glob("bracket*"):
        shutil.copy(sample, folder)
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        status, said = run(["report", "bracket.vtu", "bracket.report.toml", "-o", "r.html"])
    assert status == 0, said
    return folder / "r.html"


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    with playwright.sync_playwright() as started:
        chromium = started.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield chromium
        chromium.close()


def test_the_page_opens_without_a_word_and_without_the_network(report: Path, browser: Any) -> None:
    page = browser.new_page()
    said: list[str] = []
    asked: list[str] = []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(report.as_uri())
    page.wait_for_load_state("load")
    assert said == []
    assert [url for url in asked if not url.startswith("data:")] == [report.as_uri()]
    decoded = page.evaluate("[...document.images].map(i => i.complete && i.naturalWidth > 0)")
    assert decoded == [True] * 6
    assert page.get_by_text("met, or waived").is_visible()
    assert page.get_by_role("heading", name="Comparison with the reference").is_visible()
    page.close()


@pytest.mark.parametrize("width", [380, 1200, 1900])
def test_nothing_sticks_out_of_the_page(report: Path, browser: Any, width: int) -> None:
    page = browser.new_page(viewport={"width": width, "height": 900})
    page.goto(report.as_uri())
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    block = page.locator(".block").bounding_box()
    inner = page.locator(".block dl .wide").bounding_box()
    assert block["x"] <= inner["x"]
    assert inner["x"] + inner["width"] <= block["x"] + block["width"] + 1
    page.close()


def test_it_prints_on_a4_with_numbered_pages(report: Path, browser: Any, tmp_path: Path) -> None:
    page = browser.new_page()
    page.goto(report.as_uri())
    raw = page.pdf(prefer_css_page_size=True)
    page.close()
    assert raw.startswith(b"%PDF")
    if shutil.which("pdftotext") is None:
        pytest.skip("no pdftotext")
    import subprocess

    (tmp_path / "r.pdf").write_bytes(raw)
    text = subprocess.run(
        ["pdftotext", "-layout", "r.pdf", "-"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    ).stdout
    pages = text.rstrip("\f").split("\f")
    assert 5 <= len(pages) <= 12
    for number, sheet in enumerate(pages, 1):
        assert f"page {number} of {len(pages)}" in sheet
        assert "EB-R-017 · revision B" in sheet
        assert "SHA-256" in sheet
