"""A module imports only from those before it, and `--help` pays for click alone."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import scanclean

PACKAGE = Path(scanclean.__file__).parent
FACADE = {"__init__", "__main__"}
FLOORS = sorted(path.parent.name for path in PACKAGE.glob("*/__init__.py"))

ORDER = """
errors units settings
runs elements labels morphology
files pagewrite pageio
blocks smoothing density contrast outlines shade solids relaxation threshold
skew edges
tracks strips profiles lines frames crossings dashes removal ruling
textmeasure upright clutter company neighbours baselines columns lineset pieces textlines
places marks specks slant glyphs words reading
holes ledger layout steps recipe clean
sources runlog work pool batch
score cli
""".split()  # noqa: SIM905 (a row a layer)


def imported(path: Path) -> dict[str, int]:
    """Modules of the package that a module imports anywhere, with a line where it does."""
    found: dict[str, int] = {}
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.level == 0:
            module = node.module or ""
            if module in ("scanclean", *(f"scanclean.{floor}" for floor in FLOORS)):
                found.update((a.name, node.lineno) for a in node.names if a.name != "__version__")
            elif module.startswith("scanclean."):
                found[module.split(".")[-1]] = node.lineno
        elif isinstance(node, ast.ImportFrom):
            found[f"relative import {node.module}"] = node.lineno
        elif isinstance(node, ast.Import):
            parts = (a.name.split(".") for a in node.names)
            found.update((p[-1], node.lineno) for p in parts if p[0] == "scanclean" and len(p) > 1)
    return found


def modules() -> dict[str, Path]:
    paths = sorted(PACKAGE.rglob("*.py"), key=lambda path: path.stem)
    return {path.stem: path for path in paths if path.stem not in FACADE}


def test_the_order_lists_every_module_once():
    assert sorted(ORDER) == list(modules())


@pytest.mark.parametrize("name", modules())
def test_a_module_imports_only_from_those_before_it(name):
    before = ORDER[: ORDER.index(name)]
    above = {
        module: line for module, line in imported(modules()[name]).items() if module not in before
    }
    assert not above, f"{name} imports {above} (module: line), which do not stand before it"


def test_the_check_sees_imports_of_every_kind(tmp_path):
    source = tmp_path / "module.py"
    source.write_text(
        "import scanclean.sets.runs\n"
        "from scanclean.sets import labels\n"
        "from scanclean import clean, __version__\n"
        "def f():\n    from scanclean.batches.batch import Batch\n"
        "from . import cli\n"
    )
    assert set(imported(source)) == {"runs", "labels", "clean", "batch", "relative import None"}


@pytest.mark.parametrize("arguments", [["--help"], ["clean", "--help"], ["--version"]])
def test_help_imports_no_heavy_library(arguments):
    script = (
        "import sys\n"
        "from scanclean.cli import main\n"
        f"sys.argv = ['scanclean', *{arguments}]\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n    status = end.code\n"
        "print('HEAVY', sorted({'numpy', 'scipy', 'skimage', 'PIL'} & set(sys.modules)), status)\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True)
    assert done.stdout.splitlines()[-1] == "HEAVY [] 0", done.stdout + done.stderr
