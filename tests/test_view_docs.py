"""The examples of docs/view.md, run in order in an empty folder."""

import re
from pathlib import Path

import numpy as np
from doc_examples import run_examples

PAGE = Path(__file__).parents[1] / "docs" / "view.md"


def test_examples_run(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    page = PAGE.read_text(encoding="utf-8")
    count, names = run_examples(PAGE)
    assert count >= 6
    printed = capsys.readouterr().out
    assert "sub-satellite longitudes from" in printed and "ir104 12 bits" in printed
    for name in ("result", "picture"):
        temperature = names[name]["brightness_temperature"].sel(channel="ir104")
        assert float(np.isfinite(temperature).mean()) > 0.6
        assert 180.0 < float(temperature.min()) < float(temperature.max()) < 320.0
    for picture in re.findall(r"\]\((pictures/\S+)\)", page):
        assert (PAGE.parent / picture).is_file(), picture
