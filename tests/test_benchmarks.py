"""The benchmarks run: each once, on a tiny page, whose times say nothing."""

from __future__ import annotations

import subprocess
import sys
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from fixtures.drawn import draw
from scanclean.clean import clean_page
from scanclean.recipe import Recipe
from scanclean.scans.pageio import read_page
from tests.benchmarks import bench_clean, bench_threshold, plain_scripts

ROOT = Path(__file__).parent.parent
TINY = (60.0, 45.0)  # mm


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    path = tmp_path_factory.mktemp("bench") / "page.png"
    drawn = draw("ledger", seed=3, size=TINY)
    Image.fromarray(drawn.scan).save(path, dpi=(300, 300))
    return path


def test_every_ratio_of_a_page_is_measured(source, tmp_path):
    seconds, ratios = bench_clean.measure(source, tmp_path, 1)
    assert seconds > 0
    expected = {bench_clean.PILLOW, bench_clean.SCIKIT_IMAGE, bench_clean.MEMORY}
    assert set(ratios) - {bench_clean.OPENCV} == expected
    assert min(ratios.values()) > 0


def test_help_is_measured_against_click():
    seconds, ratios = bench_clean.start_up(1)
    assert seconds > 0
    assert set(ratios) == {bench_clean.CLICK}


def test_every_page_of_the_benchmark_is_cleaned_into_a_table(capsys, monkeypatch):
    monkeypatch.setattr(bench_clean, "extra_memory", lambda source, folder: 1)
    monkeypatch.setattr(bench_clean, "start_up", lambda turns: (0.1, {bench_clean.CLICK: 1.0}))
    arguments = ["--turns", "1", "--size", *map(str, TINY)]
    assert bench_clean.main(arguments) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 2 + len(bench_clean.PAGES) * len(bench_clean.FORMATS)
    for title in bench_clean.PAGES:
        assert sum(line.startswith(title) for line in lines) == len(bench_clean.FORMATS)


@pytest.mark.parametrize(("ratio", "check", "status"), [(9, True, 1), (1, True, 0), (9, False, 0)])
def test_a_missed_limit_is_marked_and_counts_when_asked(ratio, check, status, capsys, monkeypatch):
    ratios = {bench_clean.CLICK: float(ratio)}
    monkeypatch.setattr(bench_clean, "start_up", lambda turns: (0.1, ratios))
    monkeypatch.setattr(bench_clean, "PAGES", {})
    assert bench_clean.main(["--check"] * check) == status
    assert ("MISSED" in capsys.readouterr().out) == (ratio == 9)


def test_the_ledger_has_as_many_rules_as_it_is_said_to():
    page = bench_clean.PAGES["ledger of 35 rules"]
    drawn = draw(page.kind, size=bench_clean.A4, dpi=40.0, **page.options)
    assert len(drawn.rules) == 35


def test_the_plain_scripts_do_the_same_job(source, tmp_path):
    """They keep most of the ink and lose most of the rules, as far as their means go."""
    drawn = draw("ledger", seed=3, size=TINY)
    scripts = [plain_scripts.scikit_image]
    if find_spec("cv2"):
        scripts.append(plain_scripts.opencv)
    for script in scripts:
        script(source, tmp_path)
        with Image.open(tmp_path / "page.tif") as image:
            page = ~np.asarray(image)
        away = drawn.ink & ~drawn.rule
        assert (page & away).sum() > 0.9 * away.sum()
        assert (page & drawn.rule & ~drawn.ink).sum() < 0.5 * drawn.rule.sum()


def test_the_page_is_cleaned_as_by_the_function_on_arrays(source, tmp_path):
    bench_clean.clean_file(source, tmp_path)
    with Image.open(tmp_path / "page.tif") as image:
        cleaned = ~np.asarray(image)
    assert np.array_equal(cleaned, clean_page(read_page(source), Recipe()).ink.to_mask())


def test_thresholds_are_timed(capsys):
    bench_threshold.time_page("tiny", draw("printed", seed=5, size=TINY).scan)
    assert "ms a megapixel" in capsys.readouterr().out


@pytest.mark.parametrize("module", ["bench_clean", "bench_threshold"])
def test_benchmarks_start_from_the_command_line(module):
    command = [sys.executable, "-m", f"tests.benchmarks.{module}", "--help"]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert "usage" in done.stdout
