"""The kernels that a command runs in; a line for people out where they have to be compiled first."""

from __future__ import annotations

from stream.cli.screen import note

__all__ = ["note_compiling"]


def note_compiling(module: str) -> None:
    """Says on standard error that the first run takes longer, where `module` was never compiled."""
    from stream.kernel import compiled_before

    if not compiled_before(module):
        note("bedload: compiling, the first time only (about a minute)")
