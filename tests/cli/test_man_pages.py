"""The manual renders without a warning, names every option, and is installed with the wheel."""

import re
import shutil
import subprocess
import sysconfig
import tomllib
from pathlib import Path

import pytest
from faked_jobs import Oakum

from oakum import __version__

ROOT = Path(__file__).parents[2]
PAGES = sorted((ROOT / "man").glob("*.[15]"))
COMMANDS = ("protect", "verify", "repair", "describe", "audit", "history", "plan", "rehearse")


@pytest.mark.skipif(shutil.which("groff") is None, reason="needs groff")
@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_renders_without_a_warning(page: Path) -> None:
    done = subprocess.run(
        ["groff", "-t", "-man", "-Tutf8", "-P-cbou", "-ww", str(page)],
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stderr == ""
    assert "\nNAME\n" in done.stdout


def test_there_is_a_page_for_each_command() -> None:
    names = {page.name for page in PAGES}
    assert {"oakum.1", *(f"oakum-{command}.1" for command in COMMANDS)} <= names


@pytest.mark.parametrize("command", COMMANDS)
def test_a_page_names_every_option(oakum: Oakum, command: str) -> None:
    page = (ROOT / "man" / f"oakum-{command}.1").read_text().replace("\\-", "-")
    page += (ROOT / "man" / "oakum.1").read_text().replace("\\-", "-")
    options = set(re.findall(r"--[a-z][a-z-]+", oakum(command, "--help").out))
    assert options - set(re.findall(r"--[a-z][a-z-]+", page)) == set()


def test_every_page_goes_into_the_wheel() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())
    shared = project["tool"]["hatch"]["build"]["targets"]["wheel"]["shared-data"]
    for page in PAGES:
        assert shared[f"man/{page.name}"] == f"share/man/man{page.suffix[1:]}/{page.name}"


def test_the_pages_are_installed() -> None:
    installed = Path(sysconfig.get_path("data"), "share", "man")
    for page in PAGES:
        assert (installed / f"man{page.suffix[1:]}" / page.name).read_text() == page.read_text()


def test_pages_and_package_agree_on_the_version() -> None:
    for page in PAGES:
        if page.suffix == ".1":
            assert f'"oakum {__version__}"' in page.read_text()
