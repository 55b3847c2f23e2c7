"""The examples of docs/output.md, run in order in an empty folder."""

from pathlib import Path

import numpy as np
from doc_examples import run_examples

PAGE = Path(__file__).parents[1] / "docs" / "output.md"


def test_examples_run(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    count, names = run_examples(PAGE)
    assert count >= 3
    assert "('time', 'channel', 'y', 'x') [1 1]" in capsys.readouterr().out
    made = {p.name for p in tmp_path.iterdir()}
    assert {"picture.nc", "loop.zarr"} <= made <= {"picture.nc", "loop.zarr", "picture.tif"}
    assert np.isfinite(names["series"].brightness_temperature).mean() > 0.5
