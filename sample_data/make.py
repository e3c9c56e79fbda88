"""Write the files of the invented network: `python sample_data/make.py --out DIR --days 2031-03-11 2031-03-12`.

The same seed, the same versions of numpy, scipy, hatanaka and zlib, and the same kind of processor give the same bytes.
Another processor or another numpy may round a sine differently in its last bit, which can move a written value by one
unit of its last digit; MADE_WITH.json tells what the committed files were made with.
"""

import argparse
import json
import time
import zlib
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from importlib.metadata import version
from pathlib import Path

import numpy as np

from invented import files, network, places, truth, weather

HERE = Path(__file__).resolve().parent


def made_with() -> dict[str, object]:
    """Versions and processor features that the bytes depend on."""
    from numpy._core._multiarray_umath import __cpu_features__ as features

    return {
        "seed": network.SEED,
        "numpy": np.__version__,
        "scipy": version("scipy"),
        "hatanaka": version("hatanaka"),
        "zlib": zlib.ZLIB_RUNTIME_VERSION,
        "processor": sorted(name for name, there in features.items() if there),
    }


def receiver_day(day: str, marker: str) -> tuple[network.Simulated, bytes]:
    """One receiver's whole day: the simulation and the bytes of its file."""
    simulated = network.simulate(day, [marker])
    return simulated, files.compact_bytes(files.observation_text(simulated.signals[0]))


def main(arguments: Sequence[str] | None = None) -> None:
    """Write days of files and their truth, with progress."""
    parser = argparse.ArgumentParser(description="Write the files of the invented network.")
    parser.add_argument("--out", type=Path, default=HERE, help="folder to write to; default: beside this file")
    parser.add_argument("--days", nargs="+", default=list(weather.DAYS), help="days of the scenario")
    parser.add_argument("--processes", type=int, default=2, help="how many at once")
    chosen = parser.parse_args(arguments)
    began = time.perf_counter()
    total = files.write(chosen.out / "region.toml", places.region_toml().encode())
    note = json.dumps(made_with(), indent=1) + "\n"
    total += files.write(chosen.out / "MADE_WITH.json", note.encode())
    with ProcessPoolExecutor(chosen.processes) as pool:
        for day in chosen.days:
            parts = []
            days = [day] * len(places.MARKERS)
            for marker, (simulated, content) in zip(
                places.MARKERS, pool.map(receiver_day, days, places.MARKERS), strict=True
            ):
                name = files.observation_name(marker, simulated.day, 30.0)
                total += files.write(chosen.out / day / name, content)
                parts.append(simulated)
                print(f"{time.perf_counter() - began:6.1f} s  {day}  {name}  {len(content) / 1e3:7.1f} kB", flush=True)
            whole = replace(
                parts[0],
                signals=tuple(p.signals[0] for p in parts),
                truth=tuple(p.truth[0] for p in parts),
            )
            name = files.navigation_name(whole.day)
            total += files.write(chosen.out / day / name, files.packed(whole.navigation_text()))
            total += files.write(chosen.out / "truth" / f"{day}.npz", truth.pack(whole))
    print(f"{total / 1e6:.2f} MB in {time.perf_counter() - began:.1f} s")


if __name__ == "__main__":
    main()
