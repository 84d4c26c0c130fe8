"""What the screen asks of whoever performs the run, and nothing more."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from bench.procedure.live import LiveView

__all__ = ["RunControl"]


class RunControl(Protocol):
    """One run, performed in a thread of its own, as seen from a screen.

    Every method may be called from any thread. Only ``close`` waits.
    """

    @property
    def started(self) -> bool:
        """Whether ``start`` has been called."""
        ...

    @property
    def finished(self) -> bool:
        """Whether the run has ended, one way or another, and moves nothing any more."""
        ...

    def view(self) -> LiveView:
        """The run now. Quick: the screen asks about ten times a second.

        ``zero_m`` with ``zero_standard_uncertainty_m`` is a zero that was measured; without it, the
        middle of where the zero is expected.
        """
        ...

    def start(self) -> None:
        """Begin the run in the conductor's own thread and return at once. Raises EvenarmError."""
        ...

    def answer(self, question_id: str, value: str | bool) -> None:
        """Answer the open question: a name where it asks for one, else yes or no.

        An answer to a question that is no longer open is ignored. Raises EvenarmError.
        """
        ...

    def stop(self, reason: str) -> None:
        """Software stop: immediate, idempotent, in every state, from any thread; does not wait."""
        ...

    def close(self, timeout_s: float) -> None:
        """Stop what moves, wait for the end, let go of devices and journal. Idempotent."""
        ...
