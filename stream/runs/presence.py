"""Settings and decoded messages in; what makes them learn nothing out: no outcome, a path never met."""

from __future__ import annotations

from collections.abc import Iterator

from stream.errors import BadSettings
from stream.message import Examples
from stream.settings import Settings

__all__ = ["Presence", "refuse_late_outcomes", "refuse_unlearnable"]


def refuse_late_outcomes(settings: Settings) -> None:
    """Raises BadSettings where outcomes come in a feed of their own: no command joins them yet."""
    if settings.outcomes.kind != "inline":
        raise BadSettings(
            f'outcomes.kind = "{settings.outcomes.kind}": this version does not join outcomes that come in a '
            "feed of their own yet. Put them into the messages, name their path in message.label, and set "
            'outcomes.kind = "inline"'
        )


def refuse_unlearnable(settings: Settings) -> None:
    """Raises BadSettings where the settings name no outcome or no field, or one that is not joined yet."""
    refuse_late_outcomes(settings)
    if settings.message.label is None:
        raise BadSettings(
            "message.label is not set: without the outcome nothing is learned. Give its path in the settings "
            "file, or with --set message.label=PATH"
        )
    if not settings.fields:
        raise BadSettings(
            "no [[fields]] in the settings: without a field there is nothing to learn from. Name at least "
            "one; `bedload init --sample LOG` guesses them"
        )


class Presence:
    """Which paths of the settings had a value in any message of this run. It is no state: a run that was
    gone on with knows only what it read itself."""

    def __init__(self, settings: Settings) -> None:
        self._label = settings.message.label
        self._labelled = self._any = False
        self._unseen = {field.path: field.name for field in reversed(settings.fields)}

    def observe(self, examples: Examples) -> None:
        """Looks at the paths without a value so far."""
        self._any = self._any or len(examples) > 0
        self._labelled = self._labelled or bool((examples.labels >= 0).any())
        for path in list(self._unseen):
            column = examples.columns[path]
            if column.count(None) != len(column):
                del self._unseen[path]

    def warnings(self, resumed: bool) -> Iterator[str]:
        """A line for each path that no message had; none for a `resumed` run, whose earlier part may have."""
        if not self._any or resumed:
            return
        if not self._labelled:
            yield f"no message had `{self._label}` (message.label): nothing was learned; is the path right?"
        for path, name in reversed(self._unseen.items()):
            yield f"no message had `{path}` (field {name}): is the path right?"
