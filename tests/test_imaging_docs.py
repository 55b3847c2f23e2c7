"""The examples of docs/maps.md, run in order in an empty folder."""

import re
from pathlib import Path

from doc_examples import run_examples

PAGE = Path(__file__).parents[1] / "docs" / "maps.md"


def test_examples_run(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    page = PAGE.read_text(encoding="utf-8")
    count, _ = run_examples(PAGE)
    assert count >= 4
    assert "exists and is kept" in capsys.readouterr().out
    made = {p.name for p in (tmp_path / "pictures").iterdir()}
    assert made == {"ir104.png", "cold_tops.png", "water_vapour.png", "sheet.png", "ir104-ir123.png", "from_space.png",
                    "clear.png", "disk.png", "loop.gif"}  # fmt: skip
    for picture in re.findall(r"\]\((pictures/\S+)\)", page):
        assert (PAGE.parent / picture).is_file(), picture


def test_page_names_all_colours_and_ranges():
    from chansim.imaging.colours import RANGES, TABLES

    page = PAGE.read_text(encoding="utf-8")
    for name in TABLES:
        assert f"`{name}`" in page
    for low, high in RANGES.values():
        assert f"{low:g} to {high:g} K" in page
