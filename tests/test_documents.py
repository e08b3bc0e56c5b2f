"""What the documents say can be run, runs; what they point to, exists."""

from __future__ import annotations

import importlib
import re
import shlex
from pathlib import Path

import numpy as np
import pytest

import kernelfit as kf
from kernelfit.cli import main
from kernelfit.kernels.base import DistanceRange

ROOT = Path(__file__).resolve().parent.parent
GUIDE = ROOT / "DEVELOPERS.md"
PATHS = re.compile(r"`((?:kernelfit|tests|scripts|datasets|docs|\.ci)/[\w./-]*|[\w-]+\.(?:md|toml))`")


def test_the_example_of_a_kernel_family_is_a_kernel_with_the_right_derivative(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Source of the expected derivative: central differences, good to about 1e-9 at this step."""
    (example,) = re.findall(r"```python\n(.*?)```", GUIDE.read_text(encoding="utf-8"), flags=re.DOTALL)
    (tmp_path / "guide_example.py").write_text(example, encoding="utf-8")
    monkeypatch.syspath_prepend(tmp_path)
    family = importlib.import_module("guide_example").Bell()
    span = DistanceRange(reference_um=60.0, smallest_um=30.0, largest_um=400.0)
    distance = np.linspace(30.0, 400.0, 9)
    theta, step = np.array([0.2, np.log(120.0)]), 1e-5
    assert family.value(theta, np.array([60.0]), span) == pytest.approx([0.2])
    for k, row in enumerate(family.gradient(theta, distance, span)):
        move = step * np.eye(2)[k]
        rise = family.value(theta + move, distance, span) - family.value(theta - move, distance, span)
        np.testing.assert_allclose(row, rise / (2 * step), atol=1e-8)


@pytest.fixture(scope="module")
def tables(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with spikes.csv, sites.csv and windows.csv of nine coupled units, half a minute with a pause."""
    folder = tmp_path_factory.mktemp("tables")
    place = 100.0 * np.stack(np.meshgrid(np.arange(3), np.arange(3)), axis=-1).reshape(-1, 2)
    law = kf.kernels.Gaussian().at(amplitude=0.3, length_um=120.0, reference_um=100.0)
    recording = kf.simulate_recording(place, law, 3.0, 30.0, 30.0, 5)
    recording.spikes.to_csv(folder / "spikes.csv", index=False)
    recording.units[["x_um", "y_um"]].to_csv(folder / "sites.csv")
    (folder / "windows.csv").write_text("start_s,stop_s\n0,14\n15,30\n")
    return folder


def blocks_of(document: str, language: str = "") -> list[str]:
    text = (ROOT / document).read_text(encoding="utf-8")
    return re.findall(rf"^```{language}\n(.*?)^```", text, flags=re.DOTALL | re.MULTILINE)


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_the_commands_of_the_first_page_run_as_they_stand(tables: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tables)
    lines = [line for block in blocks_of("README.md") for line in block.splitlines() if line.startswith("kernelfit ")]
    assert len(lines) == 2
    for line in lines:
        assert main(shlex.split(line)[1:]) == 0, line
    assert (tables / "look" / "proposed_exclusions.csv").is_file()
    assert (tables / "results" / "report.html").is_file()


@pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")
def test_the_python_example_of_the_first_page_runs_as_it_stands(
    tables: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tables)
    (example,) = blocks_of("README.md", "python")
    names: dict[str, object] = {}
    exec(compile(example, "README.md", "exec"), names)
    assert kf.load_fit("fit.json").duration_s == pytest.approx(29.0)
    assert "amplitude" in capsys.readouterr().out


def test_the_map_of_the_package_names_files_that_are_where_it_says() -> None:
    (table,) = re.findall(r"## Map of the package\n\n(.*?)\n\n", GUIDE.read_text(encoding="utf-8"), flags=re.DOTALL)
    place, seen = "", set()
    for row in table.splitlines()[2:]:
        first, rest = row.strip("| ").split(" | ", 1) if not row.startswith("| |") else ("", row)
        if first:
            (place, *_) = re.findall(r"`([\w/]+/)`", first) or [""]
        seen.add(place)
        for name in re.findall(r"`(\w+\.py)`", first + rest):
            assert (ROOT / "kernelfit" / place / name).is_file(), f"the map speaks of {name} in kernelfit/{place}"
    parts = {f"{folder.name}/" for folder in (ROOT / "kernelfit").iterdir() if (folder / "__init__.py").is_file()}
    assert parts - {"comparison/", "network/"} <= seen  # one row for both, which hold nothing yet


@pytest.mark.parametrize("document", sorted(ROOT.glob("*.md")), ids=lambda p: p.name)
def test_what_a_document_points_to_exists(document: Path) -> None:
    for name in PATHS.findall(document.read_text(encoding="utf-8")):
        assert (ROOT / name).exists(), f"{document.name} speaks of {name}"


DOCUMENTS = sorted([*ROOT.glob("*.md"), *ROOT.glob("docs/*.md"), *ROOT.glob("datasets/*.md")])
LINKS = re.compile(r"\]\(([^)#]+)\)")


@pytest.mark.parametrize("document", DOCUMENTS, ids=lambda p: p.name)
def test_links_lead_somewhere(document: Path) -> None:
    for link in LINKS.findall(document.read_text(encoding="utf-8")):
        assert "://" in link or (document.parent / link).exists(), f"{document.name} links to {link}"


@pytest.mark.parametrize(
    "name",
    [
        "scripts/demo",
        "scripts/test",
        ".ci/run",
        "scripts/make_demo_recording",
        "scripts/benchmark",
        "scripts/calibrate",
        "scripts/interval_study",
        "scripts/smoothing_study",
    ],
)
def test_scripts_can_be_run(name: str) -> None:
    assert (ROOT / name).stat().st_mode & 0o111, f"{name} is not executable"


@pytest.mark.parametrize("name", ["benchmark", "calibrate", "make_demo_recording"])
def test_scripts_start_by_themselves_in_a_fresh_checkout(name: str) -> None:
    """The guide says so: what they import comes after the making of the environment."""
    text = (ROOT / "scripts" / name).read_text(encoding="utf-8")
    assert 0 < text.find("ensure_environment") < text.index("import numpy")
