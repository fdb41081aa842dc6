"""What ships: the package, its tables and its studies, in a wheel and in a checkout."""

import subprocess
import sys
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


@pytest.mark.slow
def test_wheel_holds_package_tables_and_studies_only(tmp_path):
    subprocess.run(  # noqa: S603 - our own interpreter
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)],
        cwd=ROOT,
        check=True,
        capture_output=True,
    )
    (wheel,) = tmp_path.glob("*.whl")
    names = zipfile.ZipFile(wheel).namelist()
    tops = {name.split("/")[0] for name in names}
    assert tops == {"tolsim", f"tolsim-{tolsim.__version__}.dist-info"}
    for folder in ("distributions", "studies"):
        shipped = {Path(name).name for name in names if name.startswith(f"tolsim/_data/{folder}/")}
        assert shipped == {path.name for path in (ROOT / folder).glob("*.toml")}
    assert "tolsim/report/templates" in {str(Path(name).parent) for name in names}
