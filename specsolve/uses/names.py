"""Names of stars matched tolerantly: spaces, case, dashes, leading zeros, a catalogue's prefix on one side only."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence

from specsolve.errors import InputError

DASHES = str.maketrans({"\u2212": "-", "\u2013": "-", "\u2010": "-", "_": " "})
MARKS = re.compile(r"^(?:NAME |V\* |\*\* |\* |CL\* |STAR )")
PREFIX = re.compile(r"^(?:HD|HIP|HR|TYC|BD|CD|CPD|GJ|LHS|SAO|2MASS|GAIA|KIC|EPIC|TIC|J)(?=[+\-0-9])")


def plain_name(name: str) -> str:
    """A name without spaces, case, marks and leading zeros.

    Examples
    --------
    >>> plain_name("HD 001178"), plain_name("bd -18_5550"), plain_name("* eps Eri")
    ('HD1178', 'BD-18/5550', 'EPSERI')
    """
    text = " ".join(name.translate(DASHES).upper().split())
    text = MARKS.sub("", text + " ").strip()
    text = re.sub(r"(?<=\d) (?=\d)", "/", text)  # BD-18 5550 is not BD-185550
    text = text.replace(" ", "")
    return re.sub(r"(?<![\d.])0+(?=\d)", "", text)


def match_names(ours: Sequence[str], theirs: Sequence[str]) -> dict[int, int]:
    """Place in `theirs` of each of `ours` that is found there.

    First by the plain name; then, for what is left, with a catalogue's prefix taken off where only one side has it. A
    prefix is never exchanged for another.

    Raises
    ------
    InputError
        If two names of one side mean the same star.

    Examples
    --------
    >>> match_names(["HD 1178", "Sun", "41667"], ["sun", "HD001178", "HD 41667"])
    {0: 1, 1: 0, 2: 2}
    """
    plain_ours, plain_theirs = ([plain_name(name) for name in names] for names in (ours, theirs))
    for names, plain in ((ours, plain_ours), (theirs, plain_theirs)):
        doubled = [name for name, count in Counter(plain).items() if count > 1]
        if doubled:
            which = ", ".join(f"'{names[i]}'" for i, name in enumerate(plain) if name == doubled[0])
            raise InputError(f"the names {which} mean the same star; keep one of them")
    places = {name: i for i, name in enumerate(plain_theirs)}
    found = {i: places[name] for i, name in enumerate(plain_ours) if name in places}
    taken = set(found.values())
    bare: dict[str, list[int]] = {}
    for k, name in enumerate(plain_theirs):
        if k not in taken:
            bare.setdefault(PREFIX.sub("", name), []).append(k)
    for i, name in enumerate(plain_ours):
        if i in found:
            continue
        matches = [
            k
            for k in bare.get(PREFIX.sub("", name), [])
            if bool(PREFIX.match(plain_theirs[k])) != bool(PREFIX.match(name))
        ]
        if len(matches) == 1 and matches[0] not in taken:
            found[i] = matches[0]
            taken.add(matches[0])
    return dict(sorted(found.items()))
