"""morph: from an optimiser's flat density image to a checked, printable mould insert.

``morph.build(job)`` runs the whole job and returns a Result; ``morph.write(result, folder)``
leaves its files. Both are loaded on first use, so that importing morph costs nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from morph.pipeline import Result, build, write

__all__ = ["Result", "__version__", "build", "write"]
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    if name in {"Result", "build", "write"}:
        from morph import pipeline

        return getattr(pipeline, name)
    raise AttributeError(f"module 'morph' has no attribute {name!r}")
