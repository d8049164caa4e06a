"""Compiled loops, and the only package that imports numba.

numba's on-disk cache knows only the caller's own file: after an edit of a callee elsewhere the
old machine code would still run. So the cache folder is named after the content of this package.
"""

from __future__ import annotations

import hashlib
import os
from pathlib import Path


def _cache_folder() -> Path:
    digest = hashlib.sha256()
    for source in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(source.name.encode() + source.read_bytes())
    base = os.environ.get("XDG_CACHE_HOME") or str(Path.home() / ".cache")
    return Path(base) / "morph-channels" / digest.hexdigest()[:16]


os.environ.setdefault("NUMBA_CACHE_DIR", str(_cache_folder()))
