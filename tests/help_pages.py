"""Writes docs/commands.md from the help texts: python -m tests.help_pages > docs/commands.md"""

import os
import subprocess
import sys

HEAD = """# Commands

The help text of every command, written by `python -m tests.help_pages` and held to the program by a test.
Exit codes above 0 come with one line on standard error; README.md has a session, settings.md the settings.
Ctrl-C ends with 130, and 141 means that whoever read the output went away, as shells report both.
"""


def help_of(*command):
    environment = {**os.environ, "COLUMNS": "90", "LC_ALL": "C.UTF-8"}
    call = [sys.executable, "-c", "from stream.cli.main import run; run()", *command, "--help"]
    return subprocess.run(call, env=environment, capture_output=True, text=True, check=True).stdout.rstrip()


def commands():
    """Every command as a tuple of words, the whole program first."""
    from stream.cli.main import app

    def names(typer_app):
        return [c.name or c.callback.__name__ for c in typer_app.registered_commands]

    yield ()
    for name in names(app):
        yield (name,)
    for group in app.registered_groups:
        own = group.typer_instance
        yield (own.info.name,)
        for name in names(own):
            yield (own.info.name, name)


def page():
    parts = [HEAD]
    for command in commands():
        title = " ".join(("bedload", *command))
        parts.append(f"## {title}\n\n```text\n{help_of(*command)}\n```\n")
    return "\n".join(parts)


if __name__ == "__main__":
    sys.stdout.write(page())
