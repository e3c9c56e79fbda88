"""How fast and in how little memory observation files come in.  Ratios are taken in one run on one machine."""

import gc
import resource
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import hatanaka
import pytest
from tests.formats.test_rinex_obs_real import _cut

from skylag import formats
from skylag.formats import rinex_obs
from skylag.ionosphere.pairs import wanted_codes
from skylag.tables import Signals

pytestmark = [pytest.mark.speed, pytest.mark.open_data]

DAY = "2020-177/obs/ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz"
DAY_2 = "2021-001/obs/zegv0010.21d.gz"
BUDGET = "issue 3: how fast and how big"


def _cpu_s() -> float:
    """Processor time of this process and of the decoders it started: other work on the machine does not count."""
    own, theirs = resource.getrusage(resource.RUSAGE_SELF), resource.getrusage(resource.RUSAGE_CHILDREN)
    return own.ru_utime + own.ru_stime + theirs.ru_utime + theirs.ru_stime


def best(job: Callable[[], object], times: int = 7) -> float:
    """Least processor time of several runs [s]."""
    spent = []
    for _ in range(times):
        gc.collect()
        begin = _cpu_s()
        job()
        spent.append(_cpu_s() - begin)
    return min(spent)


def test_a_compact_day_against_its_bare_decoding(open_data: Path, evidence: Callable[..., None]) -> None:
    """Four constellations and QZSS at 30 s: the columns that the pairs need, against `hatanaka.decompress` alone."""
    path = open_data / DAY
    decoding, reading = [], []
    for _ in range(11):  # by turns, so that both meet the same machine
        decoding.append(best(lambda: hatanaka.decompress(path), 1))
        reading.append(best(lambda: formats.read(path, wanted=wanted_codes()), 1))
    ratio = min(reading) / min(decoding)
    print(f"decoding {min(decoding):.3f} s, whole door {min(reading):.3f} s, ratio {ratio:.2f}")
    evidence("ESBC day: reading over bare decoding", source=BUDGET, expected=1.5, got=round(ratio, 2), tolerance=0,
             at_most=True)  # fmt: skip


@pytest.mark.parametrize("name", [DAY_2, "2021-001/obs/zimm0010.21o.gz"])
def test_plain_version_2_text(name: str, open_data: Path, evidence: Callable[..., None]) -> None:
    text = hatanaka.decompress(open_data / name)
    rate = len(text) / 1e6 / best(lambda: rinex_obs.parse(text, name, wanted=wanted_codes()), 15)
    print(f"{name}: {rate:.0f} MB/s")
    evidence(f"{Path(name).name}: time per MB of RINEX 2 text", source=BUDGET, expected=1000 / 60,
             got=round(1000 / rate, 2), tolerance=0, at_most=True, unit="ms")  # fmt: skip


@pytest.mark.parametrize("name", [DAY, DAY_2, "2024-209/obs/AJAC00FRA_R_20242090000_01D_30S_MO.crx.gz"])
def test_peak_memory(name: str, open_data: Path, evidence: Callable[..., None]) -> None:
    """Everything allocated at once between opening the file and holding the table, by the text's size."""
    path = open_data / name
    size = len(hatanaka.decompress(path))
    formats.read(path, wanted=wanted_codes())
    gc.collect()
    tracemalloc.start()
    try:
        formats.read(path, wanted=wanted_codes())
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    print(f"{name}: peak {peak / size:.2f} times the text")
    evidence(f"{path.name.split('.')[0][:19]}: peak memory over text", source=BUDGET, expected=6,
             got=round(peak / size, 2), tolerance=0, at_most=True)  # fmt: skip


def test_against_georinex(open_data: Path, tmp_path: Path, evidence: Callable[..., None]) -> None:
    """Both on a cut of sixty epochs (half an hour), all signals; the whole day would take georinex minutes."""
    import georinex

    text = _cut(hatanaka.decompress(open_data / DAY), 60, 1400)
    place = tmp_path / "cut.rnx"
    place.write_bytes(text)
    begin = time.process_time()
    georinex.load(place)
    theirs = time.process_time() - begin
    ours = best(lambda: formats.read(place), 15)
    whole = hatanaka.decompress(open_data / DAY)
    day = best(lambda: rinex_obs.parse(whole, DAY), 3)
    per_epoch = (theirs / 60) / (day / 2880)
    print(
        f"georinex {theirs:.1f} s, ours {ours * 1e3:.1f} ms: {theirs / ours:.0f}; on a day, per epoch: {per_epoch:.0f}"
    )
    subject = "ESBC: 500 times our time per epoch of a day over georinex's on 60 epochs, all signals"
    evidence(subject, source=BUDGET, expected=1.0, got=round(500 / per_epoch, 3), tolerance=0, at_most=True)


@pytest.mark.benchmark(max_time=3.0, min_rounds=3)
def test_a_second_by_second_hour(benchmark: Callable[..., object], open_data: Path) -> None:
    """One hour at 1 s made of the day's epochs, thinned to 30 s while reading."""
    text = _at_one_second(hatanaka.decompress(open_data / DAY))
    table = rinex_obs.parse(text, DAY, wanted=wanted_codes(), thin_to_s=30).table
    assert isinstance(table, Signals)
    assert len(table.times) == 96
    benchmark(lambda: rinex_obs.parse(text, DAY, wanted=wanted_codes(), thin_to_s=30))


def _at_one_second(text: bytes) -> bytes:
    """The 2880 epochs of a day renamed to follow each other by the second."""
    count = iter(range(2880))
    lines = text.split(b"\n")
    for k, line in enumerate(lines):
        if line.startswith(b"> 2020"):
            n = next(count)
            lines[k] = b"> 2020 06 25 00 %02d %2d.0000000" % (n // 60, n % 60) + line[29:]
    return b"\n".join(lines)
