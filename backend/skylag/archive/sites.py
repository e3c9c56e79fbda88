"""What people changed about the sites of a region: the region's own file is the start, changes lie over it.

Every change makes a new revision and no revision is ever written over, so that any earlier list can be read again.
Never judges a place: that a site lies on the map is asked by whoever takes the change.
"""

from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import sqlalchemy as sa
from sqlalchemy.engine import Connection

from skylag.archive import records, schema
from skylag.archive.part import Part
from skylag.errors import Refused
from skylag.spelling import SITE_KINDS, kind_trouble
from skylag.tables import Site

MOST_SITES = 5000
_LONGEST_NAME = 120
_TURNS = 0x536B7953  # any number that is ours


@dataclass(frozen=True)
class SiteChanges:
    """What lies over the sites of a region's file.

    revision  0 where nobody changed anything; made_at UTC, None before it is kept; said: the last change, in words
    sites     instead of those of the same name, or besides them; gone: names taken away
    """

    revision: int = 0
    made_at: np.datetime64 | None = None
    said: str = ""
    sites: tuple[Site, ...] = ()
    gone: tuple[str, ...] = ()

    def over(self, own: Sequence[Site]) -> tuple[Site, ...]:
        """The sites in force, given those of the region's file: these in their order, then the new ones in theirs."""
        changed = {site.name: site for site in self.sites}
        kept = [changed.pop(site.name, site) for site in own if site.name not in self.gone]
        return (*kept, *changed.values())

    def with_site(self, site: Site) -> "SiteChanges":
        """The same with a site put in, or put in place of the one of its name."""
        others = [one for one in self.sites if one.name != site.name]
        at = next((n for n, one in enumerate(self.sites) if one.name == site.name), len(others))
        return SiteChanges(
            self.revision, sites=(*others[:at], site, *others[at:]),
            gone=tuple(name for name in self.gone if name != site.name),
        )  # fmt: skip

    def without(self, name: str) -> "SiteChanges":
        """The same with a site taken away."""
        left = tuple(one for one in self.sites if one.name != name)
        return SiteChanges(self.revision, sites=left, gone=tuple(dict.fromkeys((*self.gone, name))))


NOTHING_CHANGED = SiteChanges()


class Sites(Part):
    """The changes of an archive's regions."""

    def of(self, region: str) -> SiteChanges:
        """What is in force."""
        with self._reading() as connection:
            return newest(connection, region)

    def history(self, region: str, most: int = 100) -> tuple[SiteChanges, ...]:
        """The last changes, newest first."""
        table = schema.site_change
        query = sa.select(table).where(table.c.region == region).order_by(table.c.revision.desc()).limit(most)
        with self._reading() as connection:
            return tuple(_changes(row) for row in connection.execute(query))

    def change(
        self, region: str, said: str, make: Callable[[SiteChanges], SiteChanges], after: int | None = None
    ) -> int:
        """Put `make` of what is in force into force; gives the new revision, or the old one where nothing differs.

        after  the revision that the change was made on; Refused where somebody else was faster
        """

        def insert(connection: Connection) -> int:
            if connection.dialect.name == "postgresql":  # changes take turns; on SQLite all writers do
                connection.execute(sa.select(sa.func.pg_advisory_xact_lock(_TURNS)))
            before = newest(connection, region)
            if after is not None and after != before.revision:
                raise Refused(
                    f"the sites of {region} were changed meanwhile ({before.said}); look at them again and repeat the "
                    "change", name="revision", value=after, allowed=before.revision,
                )  # fmt: skip
            wanted = make(before)
            if (wanted.sites, wanted.gone) == (before.sites, before.gone):
                return before.revision
            if len(wanted.sites) > MOST_SITES:
                raise Refused(
                    f"{len(wanted.sites)} sites are more than the {MOST_SITES} that a region may have; take some away",
                    name="sites", value=len(wanted.sites), allowed=MOST_SITES,
                )  # fmt: skip
            facts = {"sites": [asdict(site) for site in wanted.sites], "gone": list(wanted.gone)}
            connection.execute(
                sa.insert(schema.site_change).values(
                    region=region, revision=before.revision + 1, said=said[:300], facts=records.to_text(facts)
                )
            )
            return before.revision + 1

        return int(self._write(insert))


def newest(connection: Connection, region: str) -> SiteChanges:
    """What is in force for a region, read in a transaction that is open already."""
    table = schema.site_change
    query = sa.select(table).where(table.c.region == region).order_by(table.c.revision.desc()).limit(1)
    row = connection.execute(query).first()
    return NOTHING_CHANGED if row is None else _changes(row)


def _changes(row: Any) -> SiteChanges:
    facts = records.from_text(row.facts)
    made_at = np.datetime64(row.made_at.replace(tzinfo=None), "s")
    return SiteChanges(
        int(row.revision), made_at, row.said, tuple(Site(**one) for one in facts["sites"]), tuple(facts["gone"])
    )


def checked(name: str, lat: float, lon: float, kind: str) -> Site:
    """A site as a person wrote it.  Raises Refused where the name is empty or too long, the place none, the
    kind misspelt."""
    name, kind = " ".join(name.split()), " ".join(kind.split()) or "site"
    rules = (
        ("name", name, 0 < len(name) <= _LONGEST_NAME and name.isprintable(), f"1 to {_LONGEST_NAME} printable signs"),
        ("kind", kind, len(kind) <= 40 and kind.isprintable(), "up to 40 printable signs"),
        ("lat", lat, -90.0 <= lat <= 90.0, "-90 to 90"),
        ("lon", lon, -180.0 <= lon <= 360.0, "-180 to 360"),
    )
    for word, value, good, allowed in rules:
        if not good:
            raise Refused(
                f"site: {word} is {value!r}, it must be {allowed}", name=word, value=str(value), allowed=allowed
            )
    if trouble := kind_trouble(kind):
        raise Refused(f"site {name}: {trouble}", name="kind", value=kind, allowed=SITE_KINDS)
    return Site(name, lat, lon, kind)
