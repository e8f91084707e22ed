"""The wheel, as somebody without the sources gets it: built, installed, run elsewhere."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import venv
from pathlib import Path

import pytest

from tracker.store.schema import HEAD

PROJECT = Path(__file__).parents[1]


def done(*command: object, cwd: Path) -> str:
    """Run a command to its end, without the surroundings of the tests; return its answer."""
    surroundings = {
        name: value
        for name, value in os.environ.items()
        if name not in ("PYTHONPATH", "VIRTUAL_ENV", "TRACKER_STORE")
    }
    ended = subprocess.run(
        [str(each) for each in command],
        cwd=cwd,
        capture_output=True,
        text=True,
        env=surroundings,
        check=False,
    )
    assert ended.returncode == 0, ended.stderr
    return ended.stdout


@pytest.fixture(scope="session")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The `tracker` of a wheel, installed without the test extra into an empty environment."""
    folder = tmp_path_factory.mktemp("wheel")
    build = ("-m", "build", "--wheel", "--no-isolation", "--outdir", folder, PROJECT)
    done(sys.executable, *build, cwd=folder)
    (wheel,) = folder.glob("*.whl")
    venv.create(folder / "env", with_pip=True)
    scripts = folder / "env" / ("Scripts" if os.name == "nt" else "bin")
    done(scripts / "python", "-m", "pip", "install", "--quiet", wheel, cwd=folder)
    return scripts / "tracker"


def test_the_installed_demo_runs_elsewhere(installed: Path, tmp_path: Path) -> None:
    """Migrations, page assets and all dependencies must have come with it."""
    line = ("demo", "--no-dashboard", "--units", "6", "--days", "5", "--json")
    made = json.loads(done(installed, *line, cwd=tmp_path))
    assert made["assessment"]["units"] >= 6
    assert (tmp_path / "larkmoor" / "priority_list.csv").is_file()
    facts = json.loads(
        done(installed, "store", "info", "--json", "--store", made["store"], cwd=tmp_path)
    )
    assert (facts["revision"], facts["assessments"]) == (HEAD, 1)
    assert facts["units"] == made["assessment"]["units"]


def test_the_installed_dashboard_has_its_pages_and_assets(installed: Path, tmp_path: Path) -> None:
    """A page that asks for a style sheet that was left at home is bare."""
    code = (
        "from pathlib import Path; import tracker; from tracker.dashboard.serve import serve; "
        "root = Path(tracker.__file__).parent; "
        "print(len(list((root / 'dashboard' / 'assets').iterdir())), "
        "len(list((root / '_migrations' / 'versions').glob('*.py'))))"
    )
    found = done(installed.with_name("python"), "-c", code, cwd=tmp_path).split()
    assets = [each for each in (PROJECT / "tracker/dashboard/assets").iterdir() if each.is_file()]
    assert int(found[0]) >= len(assets) > 0
    assert int(found[1]) == len(list((PROJECT / "migrations" / "versions").glob("*.py")))
