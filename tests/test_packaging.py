"""The package from outside: its interface, its types, and what a wheel and a source archive hold."""

from __future__ import annotations

import doctest
import os
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest
from command import environment

import capmuster
import capmuster.enumerate
import capmuster.rank
from capmuster.rank._version import __version__

ROOT = Path(__file__).parents[1]


def python(code, *arguments, **options):
    return subprocess.run(
        [sys.executable, "-c", code, *arguments],
        capture_output=True,
        encoding="utf-8",
        check=False,
        **{"env": environment(), **options},
    )


def test_every_public_name_is_there_and_lives_where_it_says():
    for name in capmuster.__all__:
        value = getattr(capmuster, name)
        assert name in dir(capmuster)
        if name != "__version__":
            assert value.__module__.startswith(("capmuster.enumerate.", "capmuster.rank."))
            assert value.__doc__
    assert set(capmuster._HOME) == set(capmuster.__all__) - {"__version__"}
    assert capmuster.__version__ == __version__


def test_the_rooms_stay_importable_beside_the_names():
    assert capmuster.enumerate.__name__ == "capmuster.enumerate"
    assert capmuster.rank.__name__ == "capmuster.rank"
    with pytest.raises(AttributeError, match="no attribute 'ranking'"):
        capmuster.ranking  # noqa: B018


def test_the_example_of_the_package_runs():
    assert doctest.testmod(capmuster).failed == 0


def test_importing_the_package_loads_nothing_heavy():
    code = "import capmuster, sys; dir(capmuster); print(*sorted(sys.modules))"
    loaded = set(python(code).stdout.split())
    assert "capmuster" in loaded
    assert not loaded & {"numpy", "pandas", "scipy", "click", "pydantic", "capmuster.rank.shortlist"}


def test_the_main_job_from_python():
    converter = capmuster.find_converter("I-G/O-I")
    assert capmuster.Converter.parse(converter.code) == converter
    assert capmuster.detail(converter).converter == converter
    assert capmuster.charge_flow(converter).capacitor_utilisation == 1
    rows = capmuster.list_converters("2/5", 3)
    assert set(rows["ratio"]) == {"2/5"} or set(map(str, rows["ratio"])) == {"2/5"}
    found = capmuster.shortlist(capmuster.load_brief("pump-shelf"), top=3)
    assert len(found.frame) == 3
    assert capmuster.load_technology("board-discrete").name == "board-discrete"
    with pytest.raises(capmuster.CapmusterError):
        capmuster.load_brief("nowhere")


USE = """
import capmuster
reveal_type(capmuster.find_converter("I-G/O-I"))
reveal_type(capmuster.load_brief("pump-shelf"))
reveal_type(capmuster.shortlist(capmuster.load_brief("pump-shelf")))
reveal_type(capmuster.list_converters("2/5", 3))
capmuster.ranking
capmuster.shortlist("pump-shelf")
"""


@pytest.mark.long
def test_types_are_precise_for_who_uses_the_package(tmp_path):
    pytest.importorskip("mypy", reason="mypy is not installed; pip install 'capmuster[lint]'")
    path = tmp_path / "use.py"
    path.write_text(USE, encoding="utf-8")
    ended = subprocess.run(
        [sys.executable, "-m", "mypy", "--strict", "--config-file", os.devnull, str(path)],
        env={**environment(), "MYPYPATH": str(ROOT / ".pkg")},
        cwd=tmp_path,
        capture_output=True,
        encoding="utf-8",
        check=False,
    )
    said = [line for line in ended.stdout.splitlines() if "use.py" in line]
    for name in ("wiring.Converter", "brief.Brief", "shortlist.Shortlist", "DataFrame"):
        assert any(name in line and "Revealed type" in line for line in said), name
    assert any('no attribute "ranking"' in line for line in said)
    assert any('incompatible type "str"; expected "Brief"' in line for line in said)


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    """Wheel from the tree, source archive, and wheel from the unpacked archive."""
    pytest.importorskip("hatchling", reason="hatchling is not installed; pip install hatchling")
    folder = tmp_path_factory.mktemp("dist")

    def build(kind, source, to):
        subprocess.run(
            [sys.executable, "-m", "hatchling", "build", "-t", kind, "-d", str(to)],
            cwd=source,
            check=True,
            capture_output=True,
        )
        return next(to.glob("*.whl" if kind == "wheel" else "*.tar.gz"))

    wheel, archive = build("wheel", ROOT, folder / "a"), build("sdist", ROOT, folder / "b")
    with tarfile.open(archive) as tar:
        tar.extractall(folder / "c", filter="data")
    again = build("wheel", next((folder / "c").iterdir()), folder / "d")
    return wheel, archive, again


@pytest.mark.long
def test_the_wheel_holds_code_catalogs_and_types(built):
    wheel, _, again = built
    names = set(zipfile.ZipFile(wheel).namelist())
    wanted = {"capmuster/__init__.py", "capmuster/py.typed", "capmuster/rank/cli.py"}
    for room in ("enumerate", "rank", "catalogs"):
        for path in (ROOT / room).rglob("*"):
            if path.suffix in (".py", ".toml", ".html", ".css", ".js", ".j2", ".json"):
                wanted.add(f"capmuster/{path.relative_to(ROOT).as_posix()}")
    assert wanted <= names
    assert not [one for one in names if "test" in one.lower().split("/")[0] or "__pycache__" in one]
    assert set(zipfile.ZipFile(again).namelist()) == names


@pytest.mark.long
def test_the_source_archive_holds_tests_and_documents(built):
    with tarfile.open(built[1]) as tar:
        names = {name.partition("/")[2] for name in tar.getnames()}
    assert {"README.md", "DEVELOPERS.md", "pyproject.toml", "tests/test_packaging.py"} <= names


@pytest.mark.long
def test_an_installed_wheel_does_the_job(built, tmp_path):
    """The console script of the installed wheel, away from the tree."""
    target = tmp_path / "site"
    subprocess.run(
        [
            sys.executable, "-m", "pip", "install", "--quiet", "--no-deps", "--no-index", "--target",
            str(target), str(built[2]),
        ],
        check=True,
        capture_output=True,
    )  # fmt: skip
    script = target / "bin" / "capmuster"
    surroundings = {**os.environ, "PYTHONPATH": str(target)}
    ended = subprocess.run(
        [script, "rank", "greenhouse-node", "--top", "2"],
        cwd=tmp_path,
        env=surroundings,
        capture_output=True,
        encoding="utf-8",
        check=False,
    )
    assert ended.returncode == 0, ended.stderr
    assert "\nplace  id" in ended.stdout
    where = python("import capmuster; print(capmuster.__file__)", cwd=tmp_path, env=surroundings).stdout
    assert where.startswith(str(target))
