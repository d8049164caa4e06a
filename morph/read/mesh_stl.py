"""STL, binary and ASCII: triangles without a unit.

Binary: 80 bytes of anything, the number of triangles, then 50 bytes each; the length must fit exactly,
which is also how the two kinds are told apart, because binary files may start with "solid". ASCII is
read facet by facet in slabs.
"""

from __future__ import annotations

import re
import struct

import numpy as np

from morph.core.arrays import Floats
from morph.read.mesh_fault import Soup, damaged, not_its_format, require_few, truncated

HEAD_BYTES, FACET_BYTES = 84, 50
SLAB_BYTES = 1 << 24

_NUMBER = rb"\s+(\S+)\s+(\S+)\s+(\S+)\s+"
_FACET = re.compile(
    rb"facet\s+normal\s+\S+\s+\S+\s+\S+\s+outer\s+loop\s+vertex"
    + rb"vertex".join([_NUMBER] * 3)
    + rb"endloop\s+endfacet"
)


def read_stl(content: bytes, name: str) -> Soup:
    """Returns the triangles of an STL file, three points each.

    Args:
        content: the whole file.
        name: its base name, for messages.

    Raises:
        InputError: `mesh-truncated`, `mesh-damaged`, `mesh-not-its-format`, `mesh-too-many-triangles`.
    """
    announced = struct.unpack_from("<I", content, 80)[0] if len(content) >= HEAD_BYTES else 0
    length = HEAD_BYTES + FACET_BYTES * announced
    if len(content) >= HEAD_BYTES and len(content) == length:
        require_few(announced, name)
        return _soup(_binary(content, announced))
    if content[:256].lstrip().lower().startswith(b"solid") and b"\0" not in content[:1024]:
        return _soup(_ascii(content, name))
    if len(content) < HEAD_BYTES:
        raise truncated(name, f"at least the {HEAD_BYTES} bytes of a binary STL's head", f"{len(content)} bytes")
    if len(content) < length:
        raise truncated(name, f"{length} bytes for the {announced} triangles announced", f"{len(content)} bytes")
    raise not_its_format(
        name,
        f"a binary STL of {length} bytes for the {announced} triangles announced, or ASCII that starts with solid",
        f"{len(content)} bytes of something else",
    )


def _soup(corners: Floats) -> Soup:
    points = corners.reshape(-1, 3)
    return Soup(points, np.arange(len(points), dtype=np.int64).reshape(-1, 3))


def _binary(content: bytes, count: int) -> Floats:
    rows = np.frombuffer(content, dtype=np.uint8, offset=HEAD_BYTES).reshape(count, FACET_BYTES)
    with np.errstate(invalid="ignore"):  # what is no number is refused later, by name
        return np.ascontiguousarray(rows[:, 12:48]).view("<f4").astype(np.float64)


def _ascii(content: bytes, name: str) -> Floats:
    text = content.lower()
    count = text.count(b"endfacet")
    require_few(count, name)
    last = text.rfind(b"endsolid")
    if last < 0 or last < text.rfind(b"endfacet"):
        raise truncated(name, "endsolid after the last facet", f"the end of the file after {count} facets")
    blocks, start = [np.empty((0, 9))], 0
    while start < last:
        stop = last
        if last - start > SLAB_BYTES:
            stop = text.rfind(b"endfacet", start, start + SLAB_BYTES) + len(b"endfacet")
            if stop <= start:
                raise damaged(name, "facets of ordinary length", f"none that ends within {SLAB_BYTES} bytes")
        blocks.append(_block(text[start:stop], name, sum(len(block) for block in blocks)))
        start = stop
    return np.concatenate(blocks)


def _block(text: bytes, name: str, before: int) -> Floats:
    found = _FACET.findall(text)
    announced = text.count(b"endfacet")
    if len(found) != announced or text.count(b"vertex") != 3 * announced:
        raise damaged(
            name,
            "facets of the form: facet normal, outer loop, three times vertex x y z, endloop, endfacet",
            f"{len(found)} of that form among {announced}, near facet {before + len(found) + 1}",
        )
    try:
        return np.array(found, dtype=np.bytes_).astype(np.float64).reshape(-1, 9)
    except ValueError:
        raise damaged(name, "numbers behind vertex", "a word that is no number") from None
