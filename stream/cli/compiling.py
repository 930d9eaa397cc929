"""The kernels that a command runs in; a line for people out where they have to be compiled first."""

from __future__ import annotations

from stream.cli.screen import note

__all__ = ["note_compiling"]


def note_compiling(module: str) -> None:
    """Says on standard error that this run takes longer, where `module` was never compiled."""
    from stream.kernel import cache_folder, compiled_before

    if cache_folder() is None:
        note("bedload: compiling, at each start (about a minute), as no folder for caches can be written in;")
        note("bedload: name one by the variable XDG_CACHE_HOME to have it done once")
    elif not compiled_before(module):
        note("bedload: compiling, the first time only (about a minute)")
