"""What ships: the package, its tables and its studies, in a wheel and in a checkout."""

import subprocess
import sys
import tarfile
import tomllib
import zipfile
from importlib.metadata import version
from pathlib import Path

import pytest

import tolsim
from tolsim.library import distributions_folder, shipped_studies, studies_folder

ROOT = Path(__file__).resolve().parent.parent


def test_tables_and_studies_are_found():
    assert list(distributions_folder().glob("*.toml"))
    assert shipped_studies()
    assert all(path.parent == studies_folder() for path in shipped_studies().values())


def test_data_folders_hold_no_code():
    """They are data: nothing in them may run when a table is read."""
    for folder in (distributions_folder(), studies_folder()):
        assert not list(folder.rglob("*.py"))


def test_one_version():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert version("tolsim") == tolsim.__version__ == project["version"]


def test_public_names_are_all_there():
    assert set(dir(tolsim)) == set(tolsim.__all__)
    for name in tolsim.__all__:
        assert getattr(tolsim, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = tolsim.nothing


def build(source, kind, target):
    """File that hatchling builds of the project in `source`."""
    subprocess.run(  # noqa: S603 - our own interpreter
        [sys.executable, "-m", "hatchling", "build", "-t", kind, "-d", str(target)],
        cwd=source,
        check=True,
        capture_output=True,
    )
    (built,) = target.glob("*.whl" if kind == "wheel" else "*.tar.gz")
    return built


@pytest.mark.slow
def test_wheel_holds_package_tables_and_studies_only(tmp_path):
    wheel = zipfile.ZipFile(build(ROOT, "wheel", tmp_path))
    names = wheel.namelist()
    tops = {name.split("/")[0] for name in names}
    information = f"tolsim-{tolsim.__version__}.dist-info"
    assert tops == {"tolsim", information}
    for folder in ("distributions", "studies"):
        shipped = {Path(name).name for name in names if name.startswith(f"tolsim/_data/{folder}/")}
        data = [path for ending in ("toml", "csv") for path in (ROOT / folder).rglob(f"*.{ending}")]
        assert shipped == {path.name for path in data}
    templates = {name for name in names if name.startswith("tolsim/report/templates/")}
    assert len(templates) == len(list((ROOT / "tolsim/report/templates").iterdir()))
    assert "# tolsim" in wheel.read(f"{information}/METADATA").decode()


@pytest.mark.slow
def test_wheel_made_from_the_source_archive_is_the_same(tmp_path):
    with tarfile.open(build(ROOT, "sdist", tmp_path)) as archive:
        archive.extractall(tmp_path, filter="data")
    unpacked = tmp_path / f"tolsim-{tolsim.__version__}"
    assert (unpacked / "tests" / "test_packaging.py").is_file()
    for place in ("direct", "again"):
        (tmp_path / place).mkdir()
    direct = build(ROOT, "wheel", tmp_path / "direct")
    again = build(unpacked, "wheel", tmp_path / "again")
    assert sorted(zipfile.ZipFile(again).namelist()) == sorted(zipfile.ZipFile(direct).namelist())
