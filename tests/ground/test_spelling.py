"""Words that are nearly known ones."""

import pytest

from skylag.spelling import SITE_KINDS, kind_trouble, near, no_such

MANY = [f"Strip {number}" for number in range(40)]


def test_few_names_are_told_in_full() -> None:
    told = no_such("Here", "site", "Atlantis", ["Northport", "Brook"])
    assert told.message == "Here has no site Atlantis; it has Northport, Brook"
    assert told.details == {"what": "Atlantis", "nearest": ["Northport", "Brook"]}
    assert no_such("Here", "site", "Atlantis", []).message == "Here has no site Atlantis; it has none"


def test_the_nearest_of_many_are_asked_after() -> None:
    told = no_such("Here", "site", "Kelm Ile airstrip", [*MANY, "Kelm Isle airstrip"])
    assert told.message == "Here has no site Kelm Ile airstrip; did you mean Kelm Isle airstrip? It has 41 in all"
    assert told.details["nearest"] == ["Kelm Isle airstrip"]
    assert near("KELM", [*MANY, "Kelm Isle airstrip"]) == ("Kelm Isle airstrip",)
    assert len(near("Strip", MANY)) == 3
    told = no_such("Here", "site", "Zzyzx", MANY)
    assert told.message == "Here has no site Zzyzx; it has 40 in all, among them Strip 0, Strip 1, Strip 2"


@pytest.mark.parametrize("word", [*SITE_KINDS, "lighthouse", "dam", "airport", "k" * 60, ""])
def test_kinds_that_may_be(word: str) -> None:
    assert kind_trouble(word) == ""


@pytest.mark.parametrize(
    ("word", "meant"), [("aerodrom", "aerodrome"), ("Aerodrome", "aerodrome"), ("surveys", "survey"), ("SITE", "site")]
)
def test_kinds_that_are_slips(word: str, meant: str) -> None:
    assert f"looks like {meant} misspelt" in kind_trouble(word)
