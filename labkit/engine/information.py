"""What a policy can see of the loads when a task arrives."""

from labkit.checks import check_whole


class Information:
    """How fresh the loads are that a policy sees; `every` is 0 for loads as they are."""

    every: int = 0

    @property
    def name(self) -> str:
        """The model in words, as written into tables."""
        return "fresh" if self.every == 0 else f"snapshot(every={self.every})"

    def __repr__(self) -> str:
        return f"<information {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Information) and self.every == other.every

    def __hash__(self) -> int:
        return hash(self.name)


class Fresh(Information):
    """A policy sees the loads as they are when the task arrives."""


class Snapshot(Information):
    """A policy sees the loads as they were at the last report.

    Parameters
    ----------
    every : int
        A report is made before the first task and after every `every` tasks, at least 1. ``Snapshot(1)`` is
        the same as ``Fresh()``.
    """

    def __init__(self, every: int) -> None:
        self.every = check_whole("every", every)
