"""What reaches the user: the wheel, an installed wheel, an editable install."""

import subprocess
import sys
import tomllib
import zipfile
from email.parser import HeaderParser
from pathlib import Path

import pytest

LOOK_UP = """
import site, sys
site.addsitedir(sys.argv[1])
sys.path.insert(0, sys.argv[1])
from inverse.description.material import properties
print(properties.__file__)
print(properties.material("Al").name)
"""


def run(*command: str | Path, cwd: Path) -> str:
    """Standard output of a command that must succeed; its error output is shown when it does not."""
    done = subprocess.run([str(part) for part in command], cwd=cwd, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def build(repository: Path, folder: Path, kind: str) -> Path:
    """Build a wheel, `standard` or `editable`, with the backend itself: no network, no isolation."""
    run(sys.executable, "-m", "hatchling", "build", "-t", f"wheel:{kind}", "-d", folder, cwd=repository)
    (wheel,) = folder.glob("*.whl")
    return wheel


def install(wheel: Path, site: Path) -> Path:
    """Install a wheel without its dependencies into a folder of its own."""
    pip = [sys.executable, "-m", "pip", "install", "--quiet", "--no-deps", "--no-index"]
    run(*pip, "--target", site, wheel, cwd=site.parent)
    return site


def look_up(site: Path, elsewhere: Path) -> tuple[Path, str]:
    """File the package was found in and the entry it read, seen from outside the repository."""
    file, name = run(sys.executable, "-I", "-c", LOOK_UP, site, cwd=elsewhere).splitlines()
    return Path(file), name


@pytest.fixture(scope="module")
def wheel(repository: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build(repository, tmp_path_factory.mktemp("wheel"), "standard")


def shipped(folder: Path, prefix: str) -> dict[str, bytes]:
    """Name in the wheel -> content, of every file of a folder of the tree that is not a by-product."""
    files = (file for file in sorted(folder.rglob("*")) if file.is_file() and "__pycache__" not in file.parts)
    return {f"{prefix}/{file.relative_to(folder).as_posix()}": file.read_bytes() for file in files}


def test_wheel_holds_the_package_and_the_reference_tables(wheel: Path, repository: Path) -> None:
    expected = shipped(repository / "inverse", "inverse")
    expected |= shipped(repository / "reference_materials", "inverse/reference_materials")
    with zipfile.ZipFile(wheel) as archive:
        inside = {name: archive.read(name) for name in archive.namelist() if ".dist-info/" not in name}
    assert inside == expected
    assert any(name.startswith("inverse/reference_materials/") and name.endswith(".csv") for name in inside)


def test_wheel_holds_the_bundled_example(wheel: Path) -> None:
    names = zipfile.ZipFile(wheel).namelist()
    suffixes = {Path(name).suffix for name in names if name.startswith("inverse/example/")}
    assert {".csv", ".toml"} <= suffixes


def test_wheel_metadata(wheel: Path, repository: Path) -> None:
    project = tomllib.loads((repository / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    with zipfile.ZipFile(wheel) as archive:
        (name,) = (name for name in archive.namelist() if name.endswith(".dist-info/METADATA"))
        metadata = HeaderParser().parsestr(archive.read(name).decode())
        assert any(name.endswith(".dist-info/licenses/LICENSE") for name in archive.namelist())
    assert (metadata["Name"], metadata["Version"]) == ("inverse-ultrasonics", project["version"])
    assert (metadata["License-Expression"], metadata["Requires-Python"]) == ("MIT", ">=3.11")


def test_installed_wheel_finds_its_reference_tables(wheel: Path, tmp_path: Path) -> None:
    site = install(wheel, tmp_path / "site")
    file, name = look_up(site, tmp_path)
    assert (file, name) == (site / "inverse" / "description" / "material" / "properties.py", "Al")
    assert (site / "inverse" / "reference_materials").is_dir()


def test_editable_install_reads_the_tables_of_the_tree(repository: Path, tmp_path: Path) -> None:
    site = install(build(repository, tmp_path / "editable", "editable"), tmp_path / "site")
    assert not (site / "inverse").exists()
    file, name = look_up(site, tmp_path)
    assert (file, name) == (repository / "inverse" / "description" / "material" / "properties.py", "Al")
    assert (repository / "reference_materials").is_dir()


def test_wheel_from_the_source_distribution_is_the_same(
    wheel: Path, repository: Path, tmp_path: Path
) -> None:
    """The tables stand outside the package, so a source distribution could lose them on the way."""
    run(sys.executable, "-m", "hatchling", "build", "-t", "sdist", "-d", tmp_path, cwd=repository)
    (source,) = tmp_path.glob("*.tar.gz")
    run(sys.executable, "-m", "tarfile", "-e", source, tmp_path / "source", cwd=tmp_path)
    (tree,) = (tmp_path / "source").iterdir()
    again = build(tree, tmp_path / "again", "standard")
    assert sorted(zipfile.ZipFile(again).namelist()) == sorted(zipfile.ZipFile(wheel).namelist())
