"""What is asked for when a day is queued is what the worker computes with."""

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from skylag.archive import open_archive
from skylag.jobs import board, work
from skylag.settings import Estimation

T0 = np.datetime64("2031-04-01T00:00:00", "ns")


class Asked(Exception):
    """Carries what the work was asked for, instead of doing it."""


@pytest.mark.parametrize("estimation", [None, Estimation(mapping="modified", earlier_days=4, drift_hours=6.0)])
def test_a_queued_day_is_computed_as_asked(
    estimation: Estimation | None, sample_folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def caught(paths: list[Path], **asked: Any) -> None:
        raise Asked(asked)

    folder = sample_folder / "2031-03-11"
    monkeypatch.setattr(work, "network_day", caught)
    with open_archive(tmp_path) as archive:
        (number,), _ = board.add(
            archive, [next(folder.glob("MRGT*")), next(folder.glob("TARN*"))], now=T0, estimation=estimation
        )
        task = archive.tasks.one(number)
        task = replace(task, spec=json.loads(json.dumps(task.spec)))
        with pytest.raises(Asked) as asked:
            board.compute(task, None, lambda stage, share, word: None, archive)  # type: ignore[arg-type]
        (told,) = asked.value.args
        wanted = estimation or Estimation()
        assert told["choices"].earlier_days == wanted.earlier_days
        assert told["choices"] == replace(wanted.choices(), epoch_step_s=told["choices"].epoch_step_s)
        assert told["earlier"]("Nowhere", np.datetime64("2031-03-11")) is None, "asks this archive"
