"""Write the files of the invented network: `python sample_data/make.py --out DIR --days 2031-03-11 2031-03-12`.

The same seed and the same versions of numpy, scipy, hatanaka and zlib give the same bytes.  numpy computes sines and
exponentials with other code on processors with 512-bit vectors, and the last bit may differ, which moves about one
written value in ten thousand by one unit of its last digit: so this program switches that code off before numpy starts,
and the bytes do not depend on the processor's vectors.  They do depend on the C library's sines and exponentials;
MADE_WITH.json tells what the committed files were made with.
"""

import os

# Names of numpy 2.4 and of older ones; numpy ignores those that it or the processor does not know.
WIDE_VECTORS = "X86_V4 AVX512_ICL AVX512_SPR AVX512F AVX512CD AVX512_SKX AVX512_CLX AVX512_CNL"
os.environ["NPY_DISABLE_CPU_FEATURES"] = WIDE_VECTORS

import argparse  # noqa: E402  the line above must come before numpy is loaded
import json  # noqa: E402
import platform  # noqa: E402
import time  # noqa: E402
import warnings  # noqa: E402
import zlib  # noqa: E402
from collections.abc import Sequence  # noqa: E402
from concurrent.futures import ProcessPoolExecutor  # noqa: E402
from dataclasses import replace  # noqa: E402
from importlib.metadata import version  # noqa: E402
from pathlib import Path  # noqa: E402

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # numpy remarks on names that it does not know
    import numpy as np

from invented import files, network, places, truth, weather  # noqa: E402

HERE = Path(__file__).resolve().parent


def made_with() -> dict[str, object]:
    """The versions that the bytes depend on."""
    return {
        "seed": network.SEED,
        "numpy": np.__version__,
        "scipy": version("scipy"),
        "hatanaka": version("hatanaka"),
        "zlib": zlib.ZLIB_RUNTIME_VERSION,
        "machine": platform.machine(),
        "c_library": " ".join(platform.libc_ver()),
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
    parser.add_argument("--receivers", nargs="+", default=list(places.MARKERS), help="markers; fewer: no truth file")
    parser.add_argument("--processes", type=int, default=2, help="how many at once")
    chosen = parser.parse_args(arguments)
    began = time.perf_counter()
    total = files.write(chosen.out / "region.toml", places.region_toml().encode())
    note = json.dumps(made_with(), indent=1) + "\n"
    total += files.write(chosen.out / "MADE_WITH.json", note.encode())
    with ProcessPoolExecutor(chosen.processes) as pool:
        for day in chosen.days:
            parts = []
            done = pool.map(receiver_day, [day] * len(chosen.receivers), chosen.receivers)
            for marker, (simulated, content) in zip(chosen.receivers, done, strict=True):
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
            if tuple(chosen.receivers) == places.MARKERS:
                total += files.write(chosen.out / "truth" / f"{day}.npz", truth.pack(whole))
    print(f"{total / 1e6:.2f} MB in {time.perf_counter() - began:.1f} s")


if __name__ == "__main__":
    main()
