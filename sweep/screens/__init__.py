"""Screens of the guided run: each shows events and answers with an action, none is known to the run."""

from types import TracebackType
from typing import Protocol, Self

from sweep.capture import Action, Event


class Screen(Protocol):
    """Opened around a run; called with each event, it answers at once: NONE where the user has said nothing."""

    def __call__(self, event: Event) -> Action: ...

    def __enter__(self) -> Self: ...

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...
