"""XML read event by event: no document type, no entities, bounded depth and number of elements."""

from __future__ import annotations

from collections.abc import Callable
from typing import NoReturn
from xml.parsers import expat

from morph.core.errors import InputError
from morph.read.image_fault import damaged

DEEPEST = 64
MOST_ELEMENTS = 200_000


def read_xml(
    content: bytes,
    name: str,
    start: Callable[[str, dict[str, str]], None],
    end: Callable[[str], object],
    text: Callable[[str], None],
) -> None:
    """Calls `start`, `end` and `text` for what the XML in `content` holds; tags without their namespace.

    Args:
        content: the whole document.
        name: base name of the file, for messages.
        start: called with tag and attributes.
        end: called with the tag.
        text: called with stretches of text.

    Raises:
        InputError: `image-xml-unsafe` or `image-damaged`.
    """
    depth = n_elements = 0

    def unsafe(found: str) -> NoReturn:
        raise InputError(
            "image-xml-unsafe",
            expected=f"plain XML of at most {MOST_ELEMENTS} elements, {DEEPEST} deep",
            found=found,
            where=name,
            do="Export it again without document type and entities.",
        )

    def open_element(tag: str, attributes: dict[str, str]) -> None:
        nonlocal depth, n_elements
        depth, n_elements = depth + 1, n_elements + 1
        if depth > DEEPEST or n_elements > MOST_ELEMENTS:
            unsafe(f"{n_elements} elements or {depth} levels")
        start(tag.rsplit(":", 1)[-1], attributes)

    def close_element(tag: str) -> None:
        nonlocal depth
        depth -= 1
        end(tag.rsplit(":", 1)[-1])

    parser = expat.ParserCreate()
    parser.buffer_text = True
    parser.StartElementHandler = open_element
    parser.EndElementHandler = close_element
    parser.CharacterDataHandler = text
    parser.StartDoctypeDeclHandler = lambda *_: unsafe("a document type declaration")
    parser.EntityDeclHandler = lambda *_: unsafe("an entity declaration")
    try:
        parser.Parse(content, True)
    except (expat.ExpatError, ValueError, LookupError) as error:
        line = getattr(error, "lineno", 0)
        raise damaged("well-formed XML", f"a fault in line {line}", name) from error
