"""What is tested is what is installed."""

import importlib
import json
import sysconfig
from importlib.metadata import distributions
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGES = ("sites", "fleet", "demo_fleet")


def installed_files() -> dict[str, Path]:
    """Files of the distribution in site-packages by name, as pip recorded them; empty for an editable install."""
    place = sysconfig.get_path("purelib")
    (found,) = [one for one in distributions(path=[place]) if one.name == "shedwright"]
    if json.loads(found.read_text("direct_url.json") or "{}").get("dir_info", {}).get("editable"):
        return {}
    files = found.files or []
    return {str(path): Path(str(path.locate())) for path in files if path.parts[0] in PACKAGES}


@pytest.mark.parametrize("name", PACKAGES)
def test_imports_come_from_the_installed_distribution(name: str) -> None:
    """An editable install has no files of its own and must import the checkout; any other must not."""
    module = importlib.import_module(name)
    source = Path(str(module.__file__)).resolve()
    files = installed_files()
    if files:
        assert source == files[f"{name}/__init__.py"].resolve()
        assert not source.is_relative_to(ROOT / name)
    else:
        assert source == ROOT / name / "__init__.py"


def test_every_installed_file_is_the_checkouts() -> None:
    """A stale install would test yesterday's code."""
    wanted = {
        str(path.relative_to(ROOT))
        for name in PACKAGES
        for path in (ROOT / name).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert len(wanted) > 60
    files = {name: path for name, path in installed_files().items() if "__pycache__" not in name}
    if files:
        assert set(files) == wanted
        different = [name for name in wanted if files[name].read_bytes() != (ROOT / name).read_bytes()]
        assert different == []
