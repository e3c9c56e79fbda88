"""What a misspelt word may have been meant for: names that are known, kinds of sites.

Puts it into messages alone: no word is ever taken for another.
"""

import difflib
from collections.abc import Sequence

from skylag.errors import Missing

# Kinds of sites: aerodromes have approaches told; all others are told alike.  Any other word may be a kind too.
SITE_KINDS = ("aerodrome", "survey", "port", "site")
_FEW = 8  # names that are told in full
_NEAR = 3  # names told of many
_SLIP = 0.8  # shared letters from which a word is a known one misspelt (our choice)


def near(name: str, known: Sequence[str]) -> tuple[str, ...]:
    """Known names that hold a name, or are spelt nearly so, case aside; the nearest first, three at the most."""
    word = name.strip().lower()
    holding = [one for one in known if len(word) > 2 and word in one.lower()]
    lower = {one.lower(): one for one in known}
    alike = [lower[one] for one in difflib.get_close_matches(word, lower, _NEAR)]
    return tuple(dict.fromkeys((*alike, *holding)))[:_NEAR]


def no_such(owner: str, what: str, name: str, known: Sequence[str], instead: str = "") -> Missing:
    """To be raised where an owner has nothing of a name; `what` it would be: site, receiver.

    The nearest names are asked after; all are told only where they are few.  instead: another way out, in words.
    """
    likely = near(name, known)
    meant = f"; did you mean {' or '.join(likely)}?" if likely else ""
    if len(known) <= _FEW:
        there = f"it has {', '.join(known) or 'none'}"
    else:
        there = f"it has {len(known)} in all" + ("" if likely else f", among them {', '.join(known[:_NEAR])}")
    joined = f"{meant} {there[0].upper()}{there[1:]}" if meant else f"; {there}"
    return Missing(
        f"{owner} has no {what} {name}{joined}" + (f"; or {instead}" if instead else ""), what=name,
        nearest=list(likely or (known if len(known) <= _FEW else known[:_NEAR])),
    )  # fmt: skip


def kind_trouble(kind: str) -> str:
    """What is wrong with a kind of site; "" for a known one and for a word that is near none of them."""
    if kind in SITE_KINDS:
        return ""
    likely = difflib.get_close_matches(kind.strip().lower(), SITE_KINDS, 1, _SLIP)
    if not likely:
        return ""
    return (
        f"kind {kind!r} looks like {likely[0]} misspelt; known kinds are {', '.join(SITE_KINDS)}, and a kind of your "
        "own must not be spelt nearly like one of them"
    )
