"""
Documents as PDF and drawings as PNG, set by Typst in this process: no file is written and nothing is fetched.

What a document says comes in as JSON, never as markup, so that no name can be taken for an instruction.
"""

import json
from collections.abc import Mapping
from datetime import datetime
from functools import lru_cache
from pathlib import Path
from typing import Any

import typst

TEMPLATES = Path(__file__).parent / "templates"

# Three pixels for each of the drawing's own: sharp in print over the width of a page.
PIXELS_PER_INCH = 288.0

_PICTURE = b"""
#set page(width: auto, height: auto, margin: 0pt)
#image(bytes(sys.inputs.svg), format: "svg")
"""


@lru_cache(maxsize=1)
def _fonts() -> typst.Fonts:
    """Those that come with the package, and the machine's for letters that these lack."""
    return typst.Fonts()


def png_of(svg: bytes) -> bytes:
    """A drawing as pixels."""
    return typst.compile(
        _PICTURE, format="png", ppi=PIXELS_PER_INCH, font_paths=_fonts(), sys_inputs={"svg": svg.decode()}
    )


def pdf_of(template: str, data: Mapping[str, Any], at: datetime) -> bytes:
    """
    A tagged PDF; the same data and moment give the same bytes.

    Args:
        template: The name of a file beside those of the pages.
        data: As JSON.
        at: When it was made.
    """
    source = (TEMPLATES / template).read_bytes()
    return typst.compile(
        source,
        format="pdf",
        font_paths=_fonts(),
        sys_inputs={"record": json.dumps(data)},
        timestamp=at.replace(microsecond=0),
    )
