"""Words made to collide: of the note words named here, words that share their address, each found by search.

An address is the top 40 bits of the first 64-bit word of MurmurHash3 x64 128, seed 0, of `note`, the byte
0x1F and the word in UTF-8; docs/simulator.md says how they were found. The simulator has no hash itself: a
test holds this table to the addresses of `stream`.
"""

from __future__ import annotations

__all__ = ["CRAFTED", "TARGETS"]

CRAFTED: dict[str, tuple[str, ...]] = {
    "locked": ("iaxgaywpyw",),
    "dismantled": ("vrsvwdzbza",),
    "leaking": (
        "pgtkxsrznf",
        "luinezyccf",
    ),
    "call": ("vskrlcfflb",),
    "took": ("xrzqkbyenl",),
    "paid": ("jgsezpnnpv",),
    "k10": ("pbsthqhtzd",),
    "w10": ("kqjjldsqqo",),
    "stuzeth": ("pgrgogriix",),
    "kaiplin": ("lidkowzgrj",),
    "dathund": ("apantcstle",),
    "rettaro": ("chkhjwzwjg",),
    "gliwenth": (
        "fyhkbmokqy",
        "esazpfrtxm",
    ),
    "kummix": ("oeqfzzlpys",),
    "glethund": ("ijqgcrqmsd",),
    "glenkley": ("xngkmfdgzo",),
    "stivask": (
        "ttjpcmuvpf",
        "qghswlgcom",
    ),
    "t12": ("udzcmcxucn",),
    "b12": ("mnwtjqxcsy",),
    "c12": ("lnxgdvndya",),
    "broazeth": ("achgbdcgci",),
    "braibbex": ("hzgnvnqrur",),
    "z12": ("cejaqnahvc",),
    "kedrask": ("yfjhuxpoln",),
    "proaffro": ("ktucslpqdv",),
    "f13": ("naaegprxym",),
    "r13": ("fvattdtyvi",),
    "t13": ("jfzjvlycwm",),
    "midrask": ("agxmehfoez",),
    "veplin": ("sqwoqahzja",),
    "broyorl": ("wwzcitedll",),
    "pronzee": ("srgufqgbfm",),
    "drublenth": ("kpsluamxjo",),
    "n14": ("byiojbivku",),
    "f14": ("ixxyloacoo",),
    "v15": ("bfmcvucjua",),
    "w15": ("faxfqdnamp",),
    "teickoo": ("vyrpyiunul",),
    "breffro": ("qxjrxlhbdh",),
    "primblo": ("dudkkeacap",),
    "k15": ("jdjopkqyjb",),
    "brawenth": ("bgtofrwlxh",),
    "h16": ("wdtwldjwav",),
    "beinkley": ("qwbvfabxzl",),
    "pravask": ("cvsghjbiub",),
    "b17": ("erownigacw",),
    "peiblenth": ("iscaonweol",),
    "drequell": ("uwedjglhfh",),
    "m17": ("asdqswwgkq",),
    "laiggins": ("jjycstcqml",),
    "x17": ("oeuqursgeo",),
    "boappo": (
        "gkjostdhxh",
        "uyzqytjqkc",
    ),
    "drathund": ("vzzcffhfxh",),
    "drankley": ("wwaxhwgrrc",),
    "skettaro": ("oqcpuuxpyl",),
    "hizzit": ("ohtsqhvyvu",),
    "poaplin": ("aaxjlmoluq",),
    "skayorl": ("rhhevaxdbn",),
    "henkley": ("ugzmgihdjc",),
    "bumorl": ("ntgtiwylee",),
}
TARGETS = frozenset(CRAFTED)
"""The words that are attacked; in the scenario each of them has a weight."""
