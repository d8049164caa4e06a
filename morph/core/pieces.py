"""Which items hang together: disjoint sets by union and path halving (Tarjan 1975, Journal of the ACM 22, 215)."""

from __future__ import annotations


class Pieces:
    """Items 0..n - 1, each a piece of its own until joined.

    >>> pieces = Pieces(3)
    >>> pieces.join(2, 0)
    >>> [pieces.root(i) == pieces.root(0) for i in range(3)]
    [True, False, True]
    """

    def __init__(self, n: int) -> None:
        self._parent = list(range(n))

    def root(self, item: int) -> int:
        """Returns the item that stands for the piece of `item`."""
        parent = self._parent
        while parent[item] != item:
            parent[item] = parent[parent[item]]
            item = parent[item]
        return item

    def join(self, one: int, two: int) -> None:
        """Makes one piece of the pieces of `one` and `two`."""
        self._parent[self.root(one)] = self.root(two)
