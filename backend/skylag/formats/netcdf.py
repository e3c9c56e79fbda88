"""field.nc: the day's maps as NetCDF with CF conventions.

Writes and reads the result file; knows nothing of how maps are made.  Delay leaves in metres on 1575.42 MHz, content in
TECU, time in UTC seconds.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from skylag.constants import L1_M_PER_TECU
from skylag.errors import FormatError
from skylag.tables import STATE_NAMES, Fields, Floats, Region, Times
from skylag.timescales import gps_to_utc, utc_to_gps

_CAUTION = (
    "Planning aid, not for navigation. Official notices, the service provider's information, local rules and licensed "
    "practice come first. State 'unseen' means that there are not enough data to say."
)


def dataset(
    fields: Fields, region: Region, *, simulated: bool = False, provisional: bool = False, notices: Sequence[str] = ()
) -> xr.Dataset:
    """The maps with their CF attributes; what must be known of the day stands before the caution in `comment`."""
    axes = ("time", "lat", "lon")
    metres = L1_M_PER_TECU

    def layer(values: np.ndarray, units: str, long_name: str, **more: object) -> tuple[object, ...]:
        return axes, values, {"units": units, "long_name": long_name, **more}

    held = xr.Dataset(
        {
            "vertical_delay": layer(
                (fields.vtec * metres).astype(np.float32), "m", "vertical ionospheric delay on 1575.42 MHz",
                ancillary_variables="vertical_delay_sigma support state",
            ),
            "vertical_delay_sigma": layer(
                (fields.vtec_sigma * metres).astype(np.float32), "m", "standard error of vertical_delay"
            ),
            "vtec": layer(
                fields.vtec, "1e16 m-2", "vertical total electron content",
            ),
            "support": layer(fields.support, "1", "lines of sight that carry the cell"),
            "slope": layer(fields.slope, "mm km-1", "slope of vertical_delay over 40 km of ground"),
            "slope_sigma": layer(fields.slope_sigma, "mm km-1", "standard error of slope"),
            "state": layer(
                fields.state, "1", "do corrections hold here",
                flag_values=np.arange(len(STATE_NAMES), dtype=np.uint8), flag_meanings=" ".join(STATE_NAMES),
            ),
        },
        coords={
            "time": ("time", gps_to_utc(fields.times), {"standard_name": "time", "long_name": "time, UTC"}),
            "lat": ("lat", fields.lats, {"standard_name": "latitude", "units": "degrees_north"}),
            "lon": ("lon", fields.lons, {"standard_name": "longitude", "units": "degrees_east"}),
        },
        attrs={
            "Conventions": "CF-1.11",
            "title": f"Ionospheric delay over {region.name}",
            "source": "skylag",
            "shell_height_km": region.shell_height_km,
            "unseen_sigma_m": region.thresholds.unseen_sigma_m,
            "simulated": "yes: invented data" if simulated else "no",
            "provisional": "yes: the day goes on" if provisional else "no",
            "comment": " ".join([*notices, _CAUTION]),
        },
    )  # fmt: skip
    return held


def write(
    fields: Fields, region: Region, path: Path, *, simulated: bool = False, provisional: bool = False,
    notices: Sequence[str] = (),
) -> None:  # fmt: skip
    """Write field.nc."""
    held = dataset(fields, region, simulated=simulated, provisional=provisional, notices=notices)
    packing = {name: {"zlib": True, "complevel": 4} for name in held.data_vars}
    time = {"time": {"units": "seconds since 1980-01-06 00:00:00", "calendar": "standard", "dtype": "int64"}}
    held.to_netcdf(path, engine="h5netcdf", encoding={**packing, **time})


def read(path: Path) -> Fields:
    """The maps of a field.nc; slope components are not in the file and come back as NaN."""
    return read_with_facts(path)[0]


def read_with_facts(path: Path) -> tuple[Fields, dict[str, Any]]:
    """The maps of a field.nc and what the file says of itself.  Raises FormatError where it is no such file."""
    try:
        with xr.open_dataset(path, engine="h5netcdf", mask_and_scale=True) as held:
            return _fields(held), dict(held.attrs)
    except (OSError, KeyError, ValueError) as trouble:
        raise FormatError(
            f"{path}: is not a field.nc that `skylag day` wrote ({trouble}); compute the day again", path=str(path),
            line=0,
        ) from trouble  # fmt: skip


def _fields(held: xr.Dataset) -> Fields:
    shape = held["vtec"].shape
    nothing = np.full(shape, np.nan, dtype=np.float32)
    return Fields(
        times=utc_to_gps(held["time"].values),
        lats=held["lat"].values,
        lons=held["lon"].values,
        vtec=held["vtec"].values.astype(np.float32),
        vtec_sigma=(held["vertical_delay_sigma"].values / L1_M_PER_TECU).astype(np.float32),
        support=held["support"].values.astype(np.uint16),
        slope=held["slope"].values.astype(np.float32),
        slope_sigma=held["slope_sigma"].values.astype(np.float32),
        slope_east=nothing,
        slope_north=nothing.copy(),
        state=held["state"].values.astype(np.uint8),
    )


def write_difference(
    path: Path, times: Times, lats: Floats, lons: Floats, ours: np.ndarray, theirs: np.ndarray, sigma: np.ndarray,
    name: str,
) -> None:  # fmt: skip
    """A NetCDF file of two maps of content [TECU] and their difference, ours minus the published one of that name."""
    axes = ("time", "lat", "lon")
    held = xr.Dataset(
        {
            "difference": (axes, ours - theirs, {"units": "1e16 m-2", "long_name": "our content minus the published"}),
            "difference_sigma": (axes, sigma, {"units": "1e16 m-2", "long_name": "standard error of difference"}),
            "vtec": (axes, ours, {"units": "1e16 m-2", "long_name": "vertical total electron content, ours"}),
            "published_vtec": (axes, theirs, {"units": "1e16 m-2", "long_name": f"the same of {name}"}),
        },
        coords={
            "time": ("time", gps_to_utc(times), {"standard_name": "time", "long_name": "time, UTC"}),
            "lat": ("lat", lats, {"standard_name": "latitude", "units": "degrees_north"}),
            "lon": ("lon", lons, {"standard_name": "longitude", "units": "degrees_east"}),
        },
        attrs={"Conventions": "CF-1.11", "title": f"Content beside {name}", "source": "skylag", "comment": _CAUTION},
    )
    time = {"time": {"units": "seconds since 1980-01-06 00:00:00", "calendar": "standard", "dtype": "int64"}}
    packing = {str(layer): {"zlib": True, "complevel": 4} for layer in held.data_vars}
    held.to_netcdf(path, engine="h5netcdf", encoding={**packing, **time})
