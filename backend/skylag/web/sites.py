"""Routes about the sites of a region: what they are, and changing them: one by one, or from a list.

The region's own file is the start; what is changed here lies over it in the archive, every change a revision that can
be read again.  Days computed before are told for the sites in force.  The gate has asked for the key already.
"""

from collections.abc import Sequence
from dataclasses import replace
from typing import Annotated

from fastapi import APIRouter, Query, Request
from fastapi.responses import Response
from starlette.concurrency import run_in_threadpool

from skylag.archive import Archive, DayRecord
from skylag.archive.sites import SiteChanges, checked
from skylag.errors import FormatError, Missing, Refused
from skylag.formats import site_lists
from skylag.spelling import SITE_KINDS, kind_trouble, no_such
from skylag.tables import Problem, Site
from skylag.web import payloads

router = APIRouter()
_MOST_BYTES = 2_000_000
_SHOWN = 20


def _newest(archive: Archive, region: str) -> DayRecord:
    """The newest day of a region, with the sites in force.  Raises Missing where the archive has none."""
    heads = archive.days(region)
    if not heads:
        known = archive.regions()
        raise Missing(
            f"the archive has no region {region}; it has {', '.join(known) or 'none yet'}", what=region,
            nearest=list(known),
        )  # fmt: skip
    return archive.day(region, heads[0].day, heads[0].version)


def _shape(request: Request, region: str, revision: int | None = None, problems: Sequence[Problem] = ()) -> Response:
    archive: Archive = request.app.state.archive
    record = _newest(archive, region)
    history = archive.sites.history(region, _SHOWN)
    sites = record.region.sites
    if revision is not None:
        then = _revision(archive, region, revision)
        sites = then.over(archive.site_states(region, record.head.day, record.head.version).sites)
    now = history[0] if history else SiteChanges()
    return payloads.reply(payloads.sites(record, sites, now, history, problems, request.app.state.writing))


def _revision(archive: Archive, region: str, revision: int) -> SiteChanges:
    if revision == 0:
        return SiteChanges()
    for one in archive.sites.history(region, 10_000):
        if one.revision == revision:
            return one
    newest = archive.sites.of(region).revision
    raise Missing(
        f"the sites of {region} have no revision {revision}; the newest is {newest}", what=str(revision), nearest=newest
    )


def _on_the_map(record: DayRecord, site: Site) -> str:
    """What is wrong with a site's place; "" where the map reaches it."""
    if record.cell_of(site.lat, site.lon) is not None:
        return ""
    box = record.region
    return (
        f"{site.name} at {site.lat:g}, {site.lon:g} lies outside the map, where nothing can be said; the map reaches "
        f"from {box.south:g} to {box.north:g} and from {box.west:g} to {box.east:g}"
    )


@router.get("/api/sites/{region}", summary="Sites of a region")
def listed(request: Request, region: str, revision: int | None = None) -> Response:
    """The sites in force, or those of an earlier revision; what was changed lately; who may change them."""
    return _shape(request, region, revision)


@router.put("/api/sites/{region}", summary="Add or change a site")
def put(
    request: Request, region: str, name: Annotated[str, Query(max_length=300)], lat: float, lon: float,
    kind: Annotated[str, Query(max_length=100)] = "site", was: Annotated[str, Query(max_length=300)] = "",
    after: int | None = None,
) -> Response:  # fmt: skip
    """A new site; with `was` the site of that name takes the new name, place and kind.

    after  the revision the change was made on: refused where somebody else was faster
    """
    archive: Archive = request.app.state.archive
    record = _newest(archive, region)
    site = checked(name, lat, lon, kind)
    wrong = _on_the_map(record, site)
    if wrong:
        raise Refused(wrong, name="lat, lon", value=f"{site.lat}, {site.lon}", allowed="a place on the map")
    there = {one.name for one in record.region.sites}
    if was and was not in there:
        raise _unknown(record, was)
    if site.name in there and site.name != was:
        raise Refused(
            f"{region} has a site {site.name} already; choose another name, or change that one", name="name",
            value=site.name, allowed="a name that is free",
        )  # fmt: skip
    said = f"{was or site.name} {'changed' if was else 'added'}"
    if was not in ("", site.name):
        said += f", now {site.name}"

    def make(before: SiteChanges) -> SiteChanges:
        return (before.without(was) if was and was != site.name else before).with_site(site)

    archive.sites.change(region, said, make, after)
    return _shape(request, region)


@router.delete("/api/sites/{region}", summary="Take a site away")
def remove(
    request: Request, region: str, name: Annotated[str, Query(max_length=300)], after: int | None = None
) -> Response:
    """The site is no longer told or judged; what days kept of it stays, and it can be added again."""
    archive: Archive = request.app.state.archive
    record = _newest(archive, region)
    if name not in {one.name for one in record.region.sites}:
        raise _unknown(record, name)
    archive.sites.change(region, f"{name} taken away", lambda before: before.without(name), after)
    return _shape(request, region)


def _unknown(record: DayRecord, name: str) -> Missing:
    return no_such(record.region.name, "site", name, [one.name for one in record.region.sites])


@router.post("/api/sites/{region}/list", summary="Take in a list of sites")
async def take_in(
    request: Request, region: str, kind: Annotated[str, Query(max_length=100)] = "", after: int | None = None
) -> Response:
    """The body is CSV (name, lat, lon, kind) or GeoJSON as UTF-8; sites of a name that is there are changed.

    kind  of those that tell none.  Lines that cannot be used are told, and the others taken.
    """
    data = b""
    async for part in request.stream():
        data += part
        if len(data) > _MOST_BYTES:
            raise Refused(
                f"the list is longer than {_MOST_BYTES // 1000} kB; send it in parts", name="body", value=len(data),
                allowed=_MOST_BYTES,
            )  # fmt: skip
    return await run_in_threadpool(_taken_in, request, region, data, kind, after)


def _taken_in(request: Request, region: str, data: bytes, kind: str, after: int | None) -> Response:
    archive: Archive = request.app.state.archive
    record = _newest(archive, region)
    if trouble := kind_trouble(kind):
        raise Refused(trouble, name="kind", value=kind, allowed=SITE_KINDS)
    try:
        sites, problems = site_lists.sites_from(data.decode("utf-8"), "list")
    except UnicodeDecodeError as cause:
        raise Refused("the list is no UTF-8 text", name="body", value="bytes", allowed="UTF-8") from cause
    except FormatError as failure:  # what was sent is at fault, not what is stored
        raise Refused(failure.message, name="body", value="list", allowed="CSV or GeoJSON") from failure
    good: list[Site] = []
    left: list[Problem] = [*problems]
    for one in sites:
        try:
            site = checked(one.name, one.lat, one.lon, kind if kind and one.kind == "site" else one.kind)
            wrong = _on_the_map(record, site)
        except Refused as failure:
            site, wrong = one, failure.message
        if wrong:
            left.append(Problem("list", 0, wrong))
        else:
            good.append(replace(site))

    def make(before: SiteChanges) -> SiteChanges:
        for site in good:
            before = before.with_site(site)
        return before

    if good:
        said = f"{len(good)} sites from a list: {', '.join(site.name for site in good)}"
        archive.sites.change(region, said, make, after)
    return _shape(request, region, problems=left)
