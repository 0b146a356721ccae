"""A span of trading sessions around the event session."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, order=True)
class Window:
    """Sessions ``start`` to ``end`` inclusive, counted from the event session (0).

    Raises:
        ValueError: if ``end`` comes before ``start``.
    """

    start: int
    end: int

    def __post_init__(self) -> None:
        if self.end < self.start:
            raise ValueError(f"window ends at {self.end}, before its start {self.start}")

    def __len__(self) -> int:
        return self.end - self.start + 1

    @property
    def label(self) -> str:
        """The window as printed: ``[-1, +1]``, with a true minus sign left to the renderers."""
        return f"[{_signed(self.start)}, {_signed(self.end)}]"

    def overlaps(self, other: Window) -> bool:
        """Whether the two spans share a session."""
        return self.start <= other.end and other.start <= self.end


def _signed(session: int) -> str:
    return f"{session:+d}" if session else "0"
