"""The wheel: built, installed away from the checkout, it brings its SQL and its defaults along."""

import os
import subprocess
import sys
import sysconfig
import venv
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
pytestmark = pytest.mark.slow


def run(*args: object, cwd: Path) -> str:
    """Run a program away from the checkout and give what it printed."""
    env = {k: v for k, v in os.environ.items() if k not in ("PYTHONPATH", "VIRTUAL_ENV")}
    ran = subprocess.run(
        [str(a) for a in args], cwd=cwd, env=env, capture_output=True, text=True, timeout=600, check=False
    )
    assert ran.returncode == 0, ran.stdout + ran.stderr
    return ran.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Build the wheel with the build backend itself, so that nothing is fetched."""
    to = tmp_path_factory.mktemp("wheel")
    run(sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", to, cwd=ROOT)
    (made,) = to.glob("*.whl")
    return made


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Install the wheel into a fresh environment and give its folder of programs.

    The libraries come from the environment of the tests, by a path file: path files found there are not
    followed, so an editable install of the checkout stays out.
    """
    home = tmp_path_factory.mktemp("fresh")
    venv.create(home, with_pip=True)
    programs = home / "bin"
    run(programs / "pip", "install", "--no-deps", "--no-index", wheel, cwd=home)
    (site,) = home.glob("lib/python*/site-packages")
    libraries = {sysconfig.get_path("purelib"), sysconfig.get_path("platlib")}
    (site / "libraries.pth").write_text("\n".join(sorted(libraries)) + "\n", encoding="utf-8")
    return programs


def test_wheel_holds_sql_and_config(wheel: Path) -> None:
    """Every SQL file and every default of the checkout is in the wheel."""
    inside = set(zipfile.ZipFile(wheel).namelist())
    for kind, ending in (("sql", "*.sql"), ("config", "*.yaml")):
        there = {f"stream/_share/{path.relative_to(ROOT).as_posix()}" for path in (ROOT / kind).rglob(ending)}
        assert there
        assert there - inside == set()


def test_installed_command_finds_its_files(installed: Path, tmp_path: Path) -> None:
    """Away from the checkout, the package is the installed one and reads the files that came with it."""
    code = "import stream.config as c; print(c.__file__, c.share_path('sql'), c.share_path('config'))"
    for path in run(installed / "python", "-c", code, cwd=tmp_path).split():
        assert Path(path).is_relative_to(installed.parent)
    assert run(installed / "turntally", "--version", cwd=tmp_path).startswith("turntally ")


def test_installed_command_runs_the_demo(installed: Path, tmp_path: Path) -> None:
    """The whole job runs from the wheel in a folder that holds nothing."""
    run(installed / "turntally", "demo", "--days", "1", "--into", "town", "--json", cwd=tmp_path)
    (store,) = (tmp_path / "town").glob("*.duckdb")
    assert '"is_sound": true' in run(
        installed / "turntally", "audit", "--json", "--store", store, cwd=tmp_path
    )
