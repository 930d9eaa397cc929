"""The invented language of courier notes: word classes, phrases made of them, and which way a word leans.

A phrase is a line of words; a word in capitals stands for any word of that class. STREET, CODE and SHOP are
open classes, whose words are made up without end (simulator/words.py). No phrase begins with an open class.
"""

from __future__ import annotations

__all__ = ["CLASSES", "ENDS", "JOINS", "OPEN_CLASSES", "PHRASES", "TOWARDS_NO", "TOWARDS_YES"]

OPEN_CLASSES = ("STREET", "CODE", "SHOP")

CLASSES: dict[str, tuple[str, ...]] = {
    name: tuple(line.split())
    for name, line in {
        "PERSON": "neighbour caretaker receptionist guard tenant porter gardener clerk housemate cleaner"
        " foreman landlord janitor cook plumber farmhand",
        "PLACE": "porch shed garage hallway lobby mailroom doorstep carport stairwell workshop greenhouse"
        " cellar barn balcony canteen café crèche kiosk",
        "DOOR": "gate door barrier buzzer intercom keypad shutter bell lift hatch latch turnstile",
        "CONDITION": "locked jammed closed broken stuck open faulty unlocked silent repaired iced dismantled",
        "PACKAGE": "box parcel crate bundle tube envelope sack",
        "STATE": "intact heavy damp torn taped dented sealed fragile leaking oversized unlabelled repacked",
        "GAVE": "left handed passed dropped given shown",
        "BEAST": "dog geese goat cockerel bees cat donkey",
        "OBSTACLE": "skip scaffold tractor lorry roadworks hedge trench crane",
        "WEATHER": "rain fog ice wind snow flood hail",
        "WHEN": "morning noon evening tomorrow later weekend midday dusk friday monday",
        "WAY": "lane row yard steps court rise end passage quay",
        "LEVEL": "ground first second third fourth top",
        "COLOUR": "green blue red white grey yellow black brown",
        "TASK": "sign ring wait phone knock park turn",
        "PAPER": "card form note slip receipt label invoice",
        "FAR": "裏口 玄関 留守 façade entrée 門口 不在 château 楼下 señal",
        "COUNT": "2 3 4 5 6 8 10 12",
        "SHOPKEEPER": "keeper owner cashier baker cobbler",
    }.items()
}

PHRASES: tuple[tuple[str, int], ...] = (
    ("left with PERSON", 30),
    ("left in PLACE", 26),
    ("DOOR CONDITION", 26),
    ("nobody home", 20),
    ("GAVE to PERSON at PLACE", 18),
    ("signed by PERSON", 18),
    ("DOOR code changed", 14),
    ("no answer at DOOR", 16),
    ("near STREET WAY", 22),
    ("corner of STREET and STREET", 12),
    ("round the back of STREET WAY", 12),
    ("drop at SHOP counter", 16),
    ("SHOPKEEPER at SHOP took it", 8),
    ("next to SHOP", 14),
    ("use bay CODE", 16),
    ("code is CODE", 14),
    ("slot CODE full", 8),
    ("new shelf CODE", 8),
    ("PACKAGE STATE", 18),
    ("PACKAGE a little STATE", 7),
    ("knocked twice", 10),
    ("rang DOOR and waited COUNT min", 8),
    ("BEAST loose in yard", 8),
    ("beware of BEAST", 7),
    ("road blocked by OBSTACLE", 9),
    ("WEATHER on the hill road", 6),
    ("van late after WEATHER", 6),
    ("call before WHEN", 9),
    ("try again WHEN", 9),
    ("please TASK first", 8),
    ("ask for PERSON", 10),
    ("wrong address", 8),
    ("moved away in spring", 4),
    ("refused at door", 6),
    ("paid at the door", 7),
    ("safe spot behind COLOUR shed", 7),
    ("COLOUR DOOR on the left", 8),
    ("LEVEL floor", 11),
    ("LEVEL floor and lift CONDITION", 6),
    ("PAPER through letterbox", 9),
    ("PAPER missing", 6),
    ("key under pot", 4),
    ("sign says FAR", 7),
    ("COUNT pieces", 6),
    ("collected already", 6),
    ("PERSON asleep", 4),
    ("office shut for holiday", 5),
    ("all fine", 8),
    ("photo taken", 7),
    ("thanks", 5),
)
"""Each phrase with how often it is used, relative to the others."""

JOINS: tuple[tuple[str, int], ...] = (
    *((",", 120), (".", 48), (";", 16), (" -", 16), (" /", 10)),
    *(("!", 6), ("...", 8), (":", 4), ("", 24), ("\\n", 4)),
)
"""What stands between two phrases, as written inside a JSON text; shares of 256."""

ENDS: tuple[tuple[str, int], ...] = (("", 150), (".", 80), ("!", 12), ("...", 8), ("?", 6))
"""What stands after the last phrase; shares of 256."""

_LEANINGS = (
    "nobody no refused wrong moved closed locked jammed broken stuck faulty silent dismantled iced blocked"
    " missing asleep shut again tomorrow later weekend evening unlabelled leaking torn oversized full dog"
    " geese roadworks scaffold trench fog ice flood changed keypad intercom 留守 不在 late stairwell fourth"
    " top call",
    "signed handed passed neighbour caretaker porter receptionist clerk took collected paid photo open"
    " unlocked repaired intact sealed safe key shed porch mailroom canteen counter fine thanks ground café"
    " morning",
)
TOWARDS_YES, TOWARDS_NO = (tuple(line.split()) for line in _LEANINGS)
"""Words whose true weight, where they have one, is above zero, and those where it is below."""
