"""The page: sections in their order, laid out as one HTML file that needs nothing else."""

from __future__ import annotations

import base64
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from unturn.errors import MissingExtraError
from unturn.report import held_sections as held
from unturn.report import result_sections as result
from unturn.report import sections as about
from unturn.report.content import Content, Shown
from unturn.report.parts import Section
from unturn.summary import CAUTION
from unturn.verdicts.wording import clean, short_name

if TYPE_CHECKING:
    from jinja2 import Template

_SECTIONS: tuple[Callable[[Content], Section | None], ...] = (
    about.outcome, held.limits, result.verdicts, result.extremes, result.left_out, result.pictures, held.versus, held.steps,
    about.cautions, about.examined, about.computed,
)  # fmt: skip
_TEMPLATES = Path(__file__).with_name("templates")


def sections_of(content: Content) -> list[Section]:
    """Return the sections of a report, those that have something to say."""
    return [section for make in _SECTIONS if (section := make(content)) is not None]


def page_template() -> Template:
    """Return what lays a page out.

    Raises
    ------
    MissingExtraError
        No template library.
    """
    try:
        import jinja2
    except ImportError:
        raise MissingExtraError(
            "a report as HTML needs Jinja2: pip install 'unturn[report]'; --format json does without."
        ) from None
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_TEMPLATES), autoescape=True, undefined=jinja2.StrictUndefined,
        trim_blocks=True, lstrip_blocks=True, keep_trailing_newline=True, finalize=_plain,
    )  # fmt: skip
    environment.filters.update(css=css_text, source=image_source)
    return environment.get_template("page.html")


def html_page(content: Content, sections: Sequence[Section], template: Template) -> str:
    """Return a report as one HTML file: images inside, no script, nothing from elsewhere."""
    wish = content.wish
    main = content.files[0]
    revision = f"revision {wish.revision}" if wish.revision else ""
    return template.render(
        content=content,
        wish=wish,
        sections=sections,
        signers=(("Prepared", wish.prepared), ("Checked", wish.checked), ("Approved", wish.approved)),
        result_name=short_name(main.path),
        result_hash=main.sha256,
        identity=" · ".join(part for part in (wish.number or content.title, revision) if part),
        caution=CAUTION,
    )


def _plain(value: Any) -> Any:
    """Return a text without what no page can hold; markup of our own stays."""
    return clean(value) if type(value) is str else value


def css_text(text: str) -> str:
    r"""Return a text as a style sheet holds it between quotes, whatever is in it.

    Examples
    --------
    >>> print(css_text('B-1"<b'))
    B\2d 1\22 \3c b
    """
    return "".join(c if c.isascii() and c.isalnum() else f"\\{ord(c):x} " for c in clean(text))


def image_source(image: Shown) -> str:
    """Return an image as the address that holds it."""
    kind = "image/png" if image.kind == "png" else "image/svg+xml"
    return f"data:{kind};base64,{base64.b64encode(image.image).decode('ascii')}"
