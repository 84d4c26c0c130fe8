"""Drivers: listed without importing, loaded one by one, broken ones named."""

from __future__ import annotations

import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

from drivers import registry
from drivers.contracts import KINDS, Driver, Setting
from drivers.registry import BUILT_IN, GROUPS, LoadFailure, available, declared, load, names

GOOD = """
from drivers.contracts import Driver, Setting
STAGE = Driver("outside", "stage", "a test", lambda settings, context: None,
               settings=(Setting("port", "text", "where it is"),))
WRONG_NAME = Driver("other", "stage", "a test", lambda settings, context: None)
NOT_A_DRIVER = 5
"""


@pytest.fixture
def plugins(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """A package with one good driver and every kind of bad one, as if it were installed."""
    (tmp_path / "outside_good.py").write_text(GOOD)
    (tmp_path / "outside_raises.py").write_text("raise RuntimeError('no \x1b[31mlibrary')")
    (tmp_path / "outside_exits.py").write_text("import sys; sys.exit(3)")
    (tmp_path / "outside_syntax.py").write_text("def")
    info = tmp_path / "outside-1.0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: outside\nVersion: 1.0\n")
    (info / "entry_points.txt").write_text(
        "[evenarm.stages]\n"
        "outside = outside_good:STAGE\n"
        "missing = outside_nowhere:STAGE\n"
        "absent = outside_good:NOTHING\n"
        "raises = outside_raises:STAGE\n"
        "exits = outside_exits:STAGE\n"
        "syntax = outside_syntax:STAGE\n"
        "number = outside_good:NOT_A_DRIVER\n"
        "misnamed = outside_good:WRONG_NAME\n"
        "[evenarm.detectors]\n"
        "simulated = outside_good:STAGE\n"
    )
    monkeypatch.syspath_prepend(str(tmp_path))
    available.cache_clear()
    yield
    available.cache_clear()
    for name in [name for name in sys.modules if name.startswith("outside_")]:
        del sys.modules[name]


def test_listing_imports_no_driver() -> None:
    code = (
        "import sys; from drivers.registry import available; rows = available();"
        "assert any(row.name == 'simulated' for row in rows);"
        "sys.exit('drivers.simulated' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_kinds_have_their_groups() -> None:
    assert set(GROUPS) == set(KINDS)
    assert len(set(GROUPS.values())) == len(KINDS)


def test_what_is_built_in_covers_what_the_package_declares() -> None:
    project = tomllib.loads((Path(__file__).parents[1] / "pyproject.toml").read_text())
    points = project["project"]["entry-points"]
    wanted = {
        (kind, name, target)
        for kind, group in GROUPS.items()
        for name, target in points.get(group, {}).items()
    }
    assert wanted == set(BUILT_IN)


@pytest.mark.parametrize(("kind", "name", "target"), BUILT_IN)
def test_every_built_in_driver_loads(kind: str, name: str, target: str) -> None:
    driver = load(kind, name)
    assert (driver.kind, driver.name) == (kind, name)
    assert driver.summary
    for setting in (*driver.settings, *driver.world):
        assert isinstance(setting, Setting)
        assert setting.doc


def test_no_name_is_listed_twice() -> None:
    rows = [(row.kind, row.name) for row in available()]
    assert len(rows) == len(set(rows))


def test_an_installed_package_and_its_checkout_are_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The entry points of the project as an installer writes them, beside those built in."""
    project = tomllib.loads((Path(__file__).parents[1] / "pyproject.toml").read_text())
    written = "".join(
        f"[{group}]\n" + "".join(f"{name} = {target}\n" for name, target in points.items())
        for group, points in project["project"]["entry-points"].items()
    )
    info = tmp_path / "evenarm-9.9.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: evenarm\nVersion: 9.9\n")
    (info / "entry_points.txt").write_text(written)
    monkeypatch.syspath_prepend(str(tmp_path))
    available.cache_clear()
    try:
        rows = [(row.kind, row.name, row.target) for row in available()]
        assert sorted(rows) == sorted(BUILT_IN)
        for kind, name, _ in BUILT_IN:
            assert load(kind, name).kind == kind
    finally:
        available.cache_clear()


def test_unknown_names() -> None:
    assert declared("stage", "nowhere") is None
    with pytest.raises(LookupError, match="known: simulated"):
        load("stage", "nowhere")
    assert names("camera") == ()


@pytest.mark.usefixtures("plugins")
def test_a_plug_in_from_outside() -> None:
    driver = declared("stage", "outside")
    assert isinstance(driver, Driver)
    assert driver.settings[0].name == "port"
    (row,) = [row for row in available() if row.name == "outside"]
    assert (row.source, row.target) == ("outside", "outside_good:STAGE")


@pytest.mark.usefixtures("plugins")
@pytest.mark.parametrize(
    ("name", "why"),
    [
        ("missing", "No module named 'outside_nowhere'"),
        ("absent", "AttributeError"),
        ("raises", "RuntimeError: no"),
        ("exits", "SystemExit: 3"),
        ("syntax", "SyntaxError"),
        ("number", "of type int, not a Driver"),
        ("misnamed", "declares itself as stage 'other'"),
    ],
)
def test_a_broken_plug_in_is_named_and_isolated(name: str, why: str) -> None:
    with pytest.raises(LoadFailure) as caught:
        load("stage", name)
    assert why in caught.value.why
    assert caught.value.plugin.name == name
    for part in (name, "from outside", "stage driver"):
        assert part in str(caught.value)
    assert load("stage", "outside").name == "outside"
    assert load("stage", "simulated").simulated


@pytest.mark.usefixtures("plugins")
def test_a_name_that_two_packages_claim_is_refused() -> None:
    with pytest.raises(LoadFailure, match="claims the same name"):
        load("detector", "simulated")
    assert names("detector") == ("simulated",)


def test_interrupting_an_import_is_not_a_broken_plug_in(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "outside_slow.py").write_text("raise KeyboardInterrupt")
    monkeypatch.syspath_prepend(str(tmp_path))
    row = registry.Available("stage", "slow", "outside_slow:STAGE", "outside")
    with pytest.raises(KeyboardInterrupt):
        registry._import(row)
