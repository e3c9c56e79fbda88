"""Files changed at random, some of each kind at every run; `-m slow` reads 200,000, as the campaign's command does.

How an input is changed is in `changes`, what must hold in `campaign`.
"""

from collections import Counter
from pathlib import Path

import pytest
from tests.formats import campaign


@pytest.mark.parametrize(
    ("kind", "count"),
    [("observations", 400), ("wrapped", 300), ("navigation", 500), ("orbits", 500), ("biases", 400), ("ionex", 200),
     ("indices", 300)],
)  # fmt: skip
def test_changed_files_end_well(kind: str, count: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(campaign, "LONGEST_S", 10.0)  # a busy machine; the campaign itself holds two seconds
    told = campaign.run(count, 20310510, tmp_path, (kind,))
    assert told["broken"] == []
    ends = Counter(told["ends"])
    assert sum(ends.values()) == count
    assert ends[f"{kind} error"] > count // 50, f"one-sided changes: {ends}"
    assert ends[f"{kind} clean"] + ends[f"{kind} problems"] > count // 5, f"one-sided changes: {ends}"


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(0, 200, 10))
def test_two_hundred_thousand_changed_files_end_well(seed: int, tmp_path: Path) -> None:
    for shard in range(seed, seed + 10):
        told = campaign.run(campaign.SHARD, shard, tmp_path)
        assert told["broken"] == []
        assert told["peak_mib"] * 2**20 < campaign.LARGEST_BYTES


def test_a_campaign_goes_on_where_it_ended(tmp_path: Path, monkeypatch: pytest.MonkeyPatch,
                                           capsys: pytest.CaptureFixture[str]) -> None:  # fmt: skip
    monkeypatch.setattr(campaign, "SHARD", 5)
    monkeypatch.setattr(campaign, "SHARES", {**campaign.SHARES, "traps": 0})
    assert campaign.main(["--count", "10", "--keep", str(tmp_path)]) == 0
    assert campaign.main(["--count", "15", "--keep", str(tmp_path)]) == 0
    assert "15 inputs" in capsys.readouterr().out
    assert len((tmp_path / "done.jsonl").read_text().splitlines()) == 3
