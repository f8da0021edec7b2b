"""Elements of a drawing, escaped by the standard library; attributes are presentation attributes, never styles."""

from collections.abc import Iterable
from xml.etree.ElementTree import Element, SubElement, tostring

from markupsafe import Markup

NAMESPACE = "http://www.w3.org/2000/svg"
FONT = "'Segoe UI', 'Helvetica Neue', Arial, 'Liberation Sans', 'DejaVu Sans', sans-serif"

# Told apart by lightness too, so that they print in black and white.
INK, FAINT, RULE, PAPER = "#1c2630", "#5a6672", "#d5d9dd", "#ffffff"
ACCEPT, REJECT, OPEN = "#0a6b60", "#a2330d", "#3d4f8f"
SERIES = ("#1c2630", "#8a5a00", "#5b3f98")
DASHES = ("", "7 4", "2 3")


def drawing(width: float, height: float, title: str, description: str = "") -> Element:
    """
    An empty drawing that scales to the room it is given.

    Args:
        width, height: In pixels where it is shown at its own size.
        title: What it shows, for those who cannot see it.
        description: What it says.
    """
    root = Element(
        "svg",
        {
            "xmlns": NAMESPACE,
            "viewBox": f"0 0 {number(width)} {number(height)}",
            "width": number(width),
            "height": number(height),
            "role": "img",
            "font-family": FONT,
            "font-size": "12",
        },
    )
    SubElement(root, "title").text = title
    if description:
        SubElement(root, "desc").text = description
    return root


def add(parent: Element, name: str, text: str | None = None, /, **attributes: str | float) -> Element:
    """A child; underscores in the names of attributes stand for hyphens, and a last one for nothing."""
    child = SubElement(parent, name, {_attribute(key): _value(value) for key, value in attributes.items()})
    child.text = text
    return child


def line(parent: Element, x1: float, y1: float, x2: float, y2: float, **attributes: str | float) -> Element:
    """A straight line."""
    return add(parent, "line", x1=x1, y1=y1, x2=x2, y2=y2, **attributes)


def polyline(parent: Element, points: Iterable[tuple[float, float]], **attributes: str | float) -> Element:
    """A line through points, not filled."""
    return add(parent, "polyline", points=joined(points), fill="none", **attributes)


def joined(points: Iterable[tuple[float, float]]) -> str:
    """Points as the format writes them."""
    return " ".join(f"{number(x)},{number(y)}" for x, y in points)


def number(value: float) -> str:
    """To a hundredth of a pixel, without needless zeros."""
    return f"{value:.2f}".rstrip("0").rstrip(".")


def markup(root: Element) -> Markup:
    """For a page."""
    return Markup(tostring(root, encoding="unicode"))  # noqa: S704 - built and escaped as elements


def file(root: Element) -> bytes:
    """As a file of its own."""
    text: bytes = tostring(root, encoding="utf-8", xml_declaration=True)
    return text


def _attribute(name: str) -> str:
    return name.rstrip("_").replace("_", "-")


def _value(value: str | float) -> str:
    return value if isinstance(value, str) else number(value)
