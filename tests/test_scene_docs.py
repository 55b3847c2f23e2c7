"""The examples of docs/reading_model_files.md, run in order in an empty folder."""

from pathlib import Path

from doc_examples import run_examples

import chansim  # noqa: F401

PAGE = Path(__file__).parents[1] / "docs" / "reading_model_files.md"


def test_examples_run(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    count, _ = run_examples(PAGE)
    assert count >= 10
    printed = capsys.readouterr().out
    for piece in (
        "This source can be used.",
        "over ice below freezing",
        "degC called K",
        "above the top level (514 hPa)",
        "2025-03-01T18:00:00",
        # sigma 0.1, p_top 10 hPa, p_s 1005 hPa: 1000 + 0.1 x 99500 Pa
        "10950.",
    ):
        assert piece in printed
