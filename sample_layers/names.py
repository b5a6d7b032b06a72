"""Made-up names with letters beyond ASCII, in the sound of three coasts; none is a real place's."""
# ruff: noqa: INP001 - modules of a script, not a package

from __future__ import annotations

_NORTH = (
    ("Skjöl", "Þelm", "Vårn", "Hrýg", "Ljósk", "Størb", "Frøyk", "Ældr", "Kvöð", "Brýnj"),
    ("udra", "ávin", "ellåa", "ørka", "ísla", "undå"),
)
_EAST = (
    ("Grzęł", "Świłk", "Żurmn", "Łąszcz", "Mszędr", "Trzósk", "Wełżn", "Ździeg", "Chróśl", "Krzępn"),
    ("awka", "ęta", "ówiec", "ołka", "iszna", "ądra"),
)
_SOUTH = (
    ("Μαλθ", "Κυμβρ", "Ξερδ", "Θολμ", "Ψαρν", "Λυκσ", "Φηγμ", "Ζεφλ", "Αργδ", "Δρυφ"),
    ("ώρος", "άμων", "ύδρα", "ίκη", "ωνός", "έας"),
)


def name(number: int, east: float, north: float) -> str:
    """Return one of a coast's 60 names, for a place so many metres east and north of the middle."""
    if north > 4_000.0:
        starts, ends = _NORTH
    else:
        starts, ends = _EAST if east > 0.0 else _SOUTH
    return starts[number % 10] + ends[(number // 10 + number) % 6]
