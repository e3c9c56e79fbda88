"""field.nc: the day's maps as NetCDF with CF conventions.

Writes and reads the result file; knows nothing of how maps are made.  Delay leaves in metres on 1575.42 MHz, content in
TECU, time in UTC seconds.
"""

from pathlib import Path

import numpy as np
import xarray as xr

from skylag.constants import L1_M_PER_TECU
from skylag.tables import STATE_NAMES, Fields, Region
from skylag.timescales import gps_to_utc, utc_to_gps

_CAUTION = (
    "Planning aid, not for navigation. Official notices, the service provider's information, local rules and licensed "
    "practice come first. State 'unseen' means that there are not enough data to say."
)


def dataset(fields: Fields, region: Region, *, simulated: bool = False) -> xr.Dataset:
    """The maps with their CF attributes."""
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
            "simulated": "yes: invented data" if simulated else "no",
            "comment": _CAUTION,
        },
    )  # fmt: skip
    return held


def write(fields: Fields, region: Region, path: Path, *, simulated: bool = False) -> None:
    """Write field.nc."""
    held = dataset(fields, region, simulated=simulated)
    packing = {name: {"zlib": True, "complevel": 4} for name in held.data_vars}
    time = {"time": {"units": "seconds since 1980-01-06 00:00:00", "calendar": "standard", "dtype": "int64"}}
    held.to_netcdf(path, engine="h5netcdf", encoding={**packing, **time})


def read(path: Path) -> Fields:
    """The maps of a field.nc; slope components are not in the file and come back as NaN."""
    with xr.open_dataset(path, engine="h5netcdf", mask_and_scale=True) as held:
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
