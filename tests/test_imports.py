"""The house rules of imports hold, and a breach would be seen."""

import shutil
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
LINT = "from importlinter.cli import lint_imports_command; lint_imports_command()"

#: A breach of each contract: its name, a file, and an import that it must not hold.
BREACHES = [
    ("Imports go down only", "errors.py", "from hwpol import instrument"),
    ("The folders of floor 2 do not know each other, even indirectly", "registration/tracking.py",
     "from hwpol.frames import flats"),
    ("The simulator shares no code with the inversion", "simulate/mueller.py", "from hwpol import stokes"),
    ("What measures does not know the simulator", "setup/plate.py", "from hwpol.simulate import mueller"),
    ("Photometry counts electrons and knows no polarisation", "photometry/growth.py", "from hwpol import fluxes"),
    ("Correction sees Stokes values and catalogues, no photometry", "correction/model.py", "from hwpol import pixels"),
    ("A calibration reaches the solve as arrays", "demodulation/limits.py", "from hwpol.correction import model"),
    ("Statistics knows (q, u, covariance) alone, whatever made them", "statistics/tables.py",
     "from hwpol.instrument import names"),
    ("Science folders know neither the night nor the products", "frames/merging.py",
     "from hwpol.products import writing"),
    ("The report draws stored products and measures nothing", "report/words.py", "from hwpol import statistics"),
    ("Nothing but the report draws or fills templates", "night/gains.py", "import matplotlib.pyplot"),
]  # fmt: skip


def lint(folder):
    """Run import-linter on a project; return its exit status and what it says."""
    done = subprocess.run(
        [sys.executable, "-c", LINT, "--no-cache"], cwd=folder, capture_output=True, text=True, check=False
    )
    return done.returncode, done.stdout + done.stderr


def contracts():
    text = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    return tomllib.loads(text)["tool"]["importlinter"]["contracts"]


def test_imports_keep_every_contract():
    status, said = lint(ROOT)
    assert status == 0, said


def test_every_contract_sees_a_breach(tmp_path):
    shutil.copytree(ROOT / "hwpol", tmp_path / "hwpol", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copy(ROOT / "pyproject.toml", tmp_path)
    for _, file, line in BREACHES:
        path = tmp_path / "hwpol" / file
        path.write_text(path.read_text(encoding="utf-8") + f"\n{line}\n", encoding="utf-8")
    status, said = lint(tmp_path)
    assert status == 1
    assert [name for name, _, _ in BREACHES if f"{name} BROKEN" not in said] == []


def test_every_contract_has_a_breach_here():
    assert {contract["name"] for contract in contracts()} == {name for name, _, _ in BREACHES}


HELP = "from hwpol.commands import main\ntry: main({})\nexcept SystemExit as end: assert not end.code"


@pytest.mark.parametrize(
    ("code", "allowed"),
    [
        ("import hwpol; dir(hwpol)", []),
        ("from hwpol.commands import main; main([])", []),
        (HELP.format(["--help"]), []),
        (HELP.format(["reduce", "--help"]), ["numpy"]),
    ],
    ids=["import", "bare command", "help", "help of a command"],
)
def test_nothing_heavy_is_loaded_before_it_is_needed(code, allowed):
    heavy = ["numpy", "scipy", "astropy", "photutils", "skimage", "matplotlib", "jinja2"]
    check = f"{code}\nimport sys\nprint(*[n for n in {heavy} if n in sys.modules])"
    done = subprocess.run([sys.executable, "-c", check], capture_output=True, text=True, check=True)
    assert set(done.stdout.splitlines()[-1].split()) <= set(allowed)
