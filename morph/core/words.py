"""Numbers in sentences: counts with their noun, and figures with digits enough to tell them from a limit."""

from __future__ import annotations


def counted(number: int, noun: str, plural: str = "") -> str:
    """Returns a count with its noun.

    >>> counted(1, "branch", "branches"), counted(2, "branch", "branches"), counted(0, "loop")
    ('1 branch', '2 branches', '0 loops')
    """
    return f"{number} {noun if number == 1 else plural or noun + 's'}"


def told_apart(value: float, limits: tuple[float, ...], digits: int = 2) -> str:
    """Returns `value` with `digits` decimals, or as many more (to six) as it takes not to read like one of `limits`.

    >>> told_apart(1.13, (1.5, 0.5)), told_apart(0.4996, (1.5, 0.5)), told_apart(0.5, (0.5,))
    ('1.13', '0.4996', '0.50')
    """
    others = [limit for limit in limits if limit != value]
    for more in range(digits, 6):
        if all(f"{value:.{more}f}" != f"{limit:.{more}f}" for limit in others):
            return f"{value:.{more}f}"
    return f"{value:.6f}"
