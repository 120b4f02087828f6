"""Nodes that belong together: union and find, near linear in the number of joins."""

from __future__ import annotations


class Partition:
    """A partition of names that is made coarser by joining."""

    def __init__(self) -> None:
        self._parents: dict[str, str] = {}

    def root(self, name: str) -> str:
        """The name that stands for the group of a name."""
        parents = self._parents
        root = name
        while parents.get(root, root) != root:
            root = parents[root]
        while parents.get(name, name) != root:
            parents[name], name = root, parents[name]
        return root

    def join(self, first: str, second: str) -> bool:
        """Join two groups. False where they were one already."""
        one, other = self.root(first), self.root(second)
        self._parents[one] = other
        return one != other
