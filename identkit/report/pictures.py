"""Pictures as files, and as SVG that can stand inline in one page beside other pictures."""

import io
import re
import warnings
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import matplotlib
from matplotlib.figure import Figure

from identkit.atomic import replacing, write_text

SCREEN_FONTS = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Liberation Sans', sans-serif"
PNG_DOTS_PER_INCH = 130
RASTER_DOTS_PER_INCH = 200

_HEAD = re.compile(r"^.*?(?=<svg)", re.DOTALL)
_METADATA = re.compile(r"<metadata>.*?</metadata>", re.DOTALL)
_STYLE = re.compile(r"<defs>\s*<style.*?</style>\s*</defs>", re.DOTALL)
_NAMESPACES = re.compile(r'\s+xmlns(:\w+)?="[^"]*"')
_OUTER_SIZE = re.compile(r'(<svg[^>]*?)\s+width="[^"]*"|(<svg[^>]*?)\s+height="[^"]*"')
_ID_OR_REFERENCE = re.compile(r'(\bid="|href="#|url\(#)([^")]*)(["\)])')
_FONT = re.compile(r"'DejaVu Sans'(?:, '[^']*'|, [\w-]+)*")


@dataclass(frozen=True)
class InlinePicture:
    """One picture in its two layouts, ready for a page.

    Attributes
    ----------
    name
        File name without its ending; also prefixes every id inside the SVG.
    wide, narrow
        SVG elements without outside references.
    """

    name: str
    wide: str
    narrow: str


def save_svg(figure: Figure, name: str) -> str:
    """Return a figure as an SVG document, the same text for the same figure.

    Parameters
    ----------
    figure
        The figure.
    name
        Seeds the ids, so that they repeat from run to run.
    """
    settings: dict[Any, Any] = {
        "svg.fonttype": "none",
        "svg.hashsalt": name,
        "text.parse_math": False,
    }
    text = io.StringIO()
    with matplotlib.rc_context(settings), _odd_letters_allowed():
        figure.savefig(
            text,
            format="svg",
            dpi=RASTER_DOTS_PER_INCH,
            metadata={"Date": None, "Creator": None, "Format": None, "Type": None},
        )
    return _counted_ids(_FONT.sub(SCREEN_FONTS, text.getvalue()))


def _counted_ids(document: str) -> str:
    """Give the ids numbers in the order in which they stand.

    The library's own ids are digests of coordinates, which differ in the last bit from run to run.
    """
    names = dict.fromkeys(re.findall(r'\bid="([^"]*)"', document))
    number = {name: f"i{at}" for at, name in enumerate(names)}

    def renamed(found: re.Match[str]) -> str:
        return found.group(1) + number.get(found.group(2), found.group(2)) + found.group(3)

    return _ID_OR_REFERENCE.sub(renamed, document)


def save_png(figure: Figure, path: Path) -> None:
    """Write a figure as a PNG picture, replacing an older one whole."""
    with replacing(path) as temporary, _odd_letters_allowed():
        figure.savefig(temporary, format="png", dpi=PNG_DOTS_PER_INCH)


class _odd_letters_allowed(warnings.catch_warnings):
    """Keep quiet about letters that the layout font lacks: the page's own fonts show them."""

    def __enter__(self) -> None:
        super().__enter__()
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")


def inline_svg(document: str, prefix: str, description: str) -> str:
    """Return an SVG document as an element that can share a page with others.

    Ids get a prefix, outside references and page-wide style rules are taken out, the size is left
    to the page, and a description is added for those who do not see the picture.

    Parameters
    ----------
    document
        As returned by `save_svg`.
    prefix
        Letters, digits and hyphens, unique on the page.
    description
        One sentence; escaped here.
    """
    body = _HEAD.sub("", document, count=1)
    body = _STYLE.sub("", _METADATA.sub("", body))
    body = _NAMESPACES.sub("", body)
    for _ in range(2):
        body = _OUTER_SIZE.sub(lambda found: found.group(1) or found.group(2), body, count=1)
    body = re.sub(r'\bid="', f'id="{prefix}-', body)
    body = re.sub(r"url\(#", f"url(#{prefix}-", body)
    body = re.sub(r'xlink:href="#', f'href="#{prefix}-', body)
    body = body.replace('xlink:href="data:', 'href="data:')
    label = _escaped(description)
    return body.replace("<svg", f'<svg role="img" aria-label="{label}"', 1).strip()


def _escaped(text: str) -> str:
    for character, entity in (("&", "&amp;"), ("<", "&lt;"), (">", "&gt;"), ('"', "&quot;")):
        text = text.replace(character, entity)
    return text


def picture(
    name: str, wide: Figure, narrow: Figure, folder: Path, description: str
) -> InlinePicture:
    """Write a figure's wide layout as SVG and PNG into `folder`; return both layouts inline."""
    document = save_svg(wide, name)
    write_text(folder / f"{name}.svg", document)
    wide.set_layout_engine("none")
    save_png(wide, folder / f"{name}.png")
    return InlinePicture(
        name,
        inline_svg(document, f"{name}-w", description),
        inline_svg(save_svg(narrow, name), f"{name}-n", description),
    )
