"""Changes of a region's sites: they lie over the region's own, each makes a revision, and nothing of old is lost."""

from concurrent.futures import ThreadPoolExecutor

import pytest
from tests.builders import REGION, STORM_DAY, invented_day

from skylag.archive import Archive
from skylag.archive.sites import NOTHING_CHANGED, checked
from skylag.errors import Refused
from skylag.tables import Site

NEW = Site("New pier", -39.0, 146.0, "port")
MOVED = Site("Northport", -37.9, 145.1, "port")


def test_changes_lie_over_the_regions_own_sites() -> None:
    own = REGION.sites
    assert NOTHING_CHANGED.over(own) == own
    changed = NOTHING_CHANGED.with_site(NEW).with_site(MOVED).without("Kelp Island")
    names = [site.name for site in changed.over(own)]
    assert names == ["Northport", "Gannet Field", "Southmere quarry", "New pier"]
    assert changed.over(own)[0] == MOVED
    # Whoever comes back is there again; a site that the region's file takes in later shows, too.
    assert Site("Later", 0, 0) in changed.over((*own, Site("Later", 0, 0)))
    back = changed.with_site(own[2])
    assert "Kelp Island" in [site.name for site in back.over(own)]
    assert back.without("New pier").without("New pier").gone == ("New pier",)


def test_every_change_is_a_revision(archive: Archive) -> None:
    archive.save(invented_day(STORM_DAY))
    assert archive.sites.of(REGION.name).revision == 0
    assert archive.sites.change(REGION.name, "New pier added", lambda before: before.with_site(NEW)) == 1
    assert archive.sites.change(REGION.name, "the same again", lambda before: before.with_site(NEW)) == 1
    assert archive.sites.change(REGION.name, "Northport removed", lambda before: before.without("Northport"), 1) == 2
    with pytest.raises(Refused, match="changed meanwhile"):
        archive.sites.change(REGION.name, "late", lambda before: before.without("Kelp Island"), after=1)
    told = archive.sites.history(REGION.name)
    assert [(one.revision, one.said) for one in told] == [(2, "Northport removed"), (1, "New pier added")]
    assert told[1].over(REGION.sites) == (*REGION.sites, NEW)
    names = [site.name for site in archive.day(REGION.name, STORM_DAY).region.sites]
    assert names == ["Gannet Field", "Kelp Island", "Southmere quarry", "New pier"]
    # What was computed stays as it was kept.
    assert archive.site_states(REGION.name, STORM_DAY).sites == REGION.sites
    assert archive.sites.of("Elsewhere") == NOTHING_CHANGED


def test_changes_at_once_are_all_kept(archive: Archive) -> None:
    sites = [Site(f"Pier {n}", -39.0, 146.0) for n in range(12)]
    with ThreadPoolExecutor(6) as pool:
        made = list(pool.map(lambda s: archive.sites.change("R", s.name, lambda before: before.with_site(s)), sites))
    assert sorted(made) == list(range(1, 13))
    assert {site.name for site in archive.sites.of("R").sites} == {site.name for site in sites}


@pytest.mark.parametrize(
    ("name", "lat", "lon", "kind"),
    [("", 0, 0, ""), ("x" * 121, 0, 0, ""), ("a\u0000b", 0, 0, ""), ("a", 91, 0, ""), ("a", float("nan"), 0, ""),
     ("a", 0, 361, ""), ("a", 0, 0, "k" * 41)],
)  # fmt: skip
def test_what_is_no_site(name: str, lat: float, lon: float, kind: str) -> None:
    with pytest.raises(Refused, match="must be"):
        checked(name, lat, lon, kind)
    assert checked("  A \n b ", 1, 2, "") == Site("A b", 1, 2, "site")
