"""Words made to collide: of the note words named here, words that share their address, each found by search.

An address is the top 40 bits of the first 64-bit word of MurmurHash3 x64 128, seed 0, of `note`, the byte
0x1F and the word in UTF-8; docs/simulator.md says how they were found. The simulator has no hash itself: a
test holds this table to the addresses of `stream`.
"""

from __future__ import annotations

__all__ = ["CRAFTED", "TARGETS"]

CRAFTED: dict[str, tuple[str, ...]] = {
    "boappo": ("gkjostdhxh",),
    "daquell": ("ykglkbozcb",),
    "e19": ("flxkoajdxs",),
    "glankley": ("imtduwxucv",),
    "h16": ("wdtwldjwav",),
    "henkley": ("ugzmgihdjc",),
    "k15": ("jdjopkqyjb",),
    "k24": ("ohpvcqilxa",),
    "kedrask": ("yfjhuxpoln",),
    "midrask": ("agxmehfoez",),
    "muffro": ("kgidcxzner",),
    "pankum": ("vygqlvsqbv",),
    "peiblenth": ("iscaonweol",),
    "vaidrask": ("urtjdbtxil",),
    "w15": ("faxfqdnamp",),
}
TARGETS = frozenset(CRAFTED)
"""The words that are attacked."""
