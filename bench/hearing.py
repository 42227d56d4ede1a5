"""Whoever a bench has listen to a run of the daemon."""

from __future__ import annotations


class Silent:
    """Hears a run, and shows nothing but what should not happen."""

    def opened(self, event: object) -> None:
        """Hear an opening."""

    def closed(self, event: object) -> None:
        """Hear a closing."""

    def adopted(self, event: object) -> None:
        """Hear an adoption."""

    def warned(self, warning: str) -> None:
        """Show what should not happen here."""
        print(warning)

    def advance(self, samples: int) -> None:
        """Hear the progress."""
