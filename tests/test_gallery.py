"""The gallery is what the tool draws today: every picture is drawn again and compared, tolerant to the rasteriser."""

from __future__ import annotations

import importlib.util
import re
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

ROOT = Path(__file__).parent.parent
IMAGES = ROOT / "docs" / "images"
PAGE = ROOT / "docs" / "gallery.md"
SHOWN = re.findall(r"!\[([^\]]*)\]\(images/([^)]+)\)", PAGE.read_text(encoding="utf-8"))
BLOCK = 8  # pixels on a side that are compared as one: letters and lines may fall a hair differently

pytestmark = pytest.mark.derived("the pictures in the documents are those that the tool draws")


@pytest.fixture(scope="module")
def again(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with every picture drawn again by the one command."""
    spec = importlib.util.spec_from_file_location("gallery", ROOT / "docs" / "gallery" / "make.py")
    assert spec is not None
    assert spec.loader is not None
    gallery = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(gallery)
    folder = tmp_path_factory.mktemp("gallery")
    assert {p.name for p in gallery.main(folder)} == {name for _, name in SHOWN}
    return folder


def blocks(path: Path, frame: int = 0) -> np.ndarray:
    """Mean colour of each block of pixels."""
    with Image.open(path) as image:
        image.seek(frame)
        pixels = np.asarray(image.convert("RGB")).astype(float)
    height, width = (n // BLOCK * BLOCK for n in pixels.shape[:2])
    cut = pixels[:height, :width].reshape(height // BLOCK, BLOCK, width // BLOCK, BLOCK, 3)
    return cut.mean(axis=(1, 3))


@pytest.mark.parametrize("name", [name for _, name in SHOWN])
def test_a_picture_of_the_gallery_is_drawn_as_before(name: str, again: Path) -> None:
    for frame in (0, 6) if name.endswith(".gif") else (0,):
        kept, drawn = blocks(IMAGES / name, frame), blocks(again / name, frame)
        assert kept.shape == drawn.shape
        away = np.abs(kept - drawn).max(axis=2)
        assert (away > 24).mean() < 0.002, f"{name}: {np.argwhere(away > 24)[:5] * BLOCK} differ"
        assert away.mean() < 0.5


def test_another_picture_would_be_noticed(again: Path) -> None:
    one, other = (blocks(again / f"ring-{k}.png") for k in ("radial", "hoop"))
    assert (np.abs(one - other).max(axis=2) > 24).mean() > 0.02


def test_pictures_are_small_and_told_in_words() -> None:
    for words, name in SHOWN:
        assert len(words) > 40
        assert 5_000 < (IMAGES / name).stat().st_size < 200_000
    assert sum((IMAGES / name).stat().st_size for _, name in SHOWN) < 1_500_000
