"""The built wheel, installed away from the checkout."""

import shutil
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
IGNORED = shutil.ignore_patterns(".*", "build", "dist", "*.egg-info", "__pycache__", "*.db*")


def test_the_wheel_holds_all_that_the_program_needs(tmp_path: Path) -> None:
    # A copy, since a build leaves folders behind that a later build takes for source.
    source, wheels, target = tmp_path / "source", tmp_path / "wheels", tmp_path / "installed"
    shutil.copytree(ROOT, source, ignore=IGNORED)
    pip = [sys.executable, "-m", "pip", "--disable-pip-version-check", "-q"]
    subprocess.run(
        [*pip, "wheel", "--no-deps", "--no-build-isolation", "-w", str(wheels), str(source)],
        cwd=tmp_path,
        check=True,
        timeout=120,
    )
    (wheel,) = wheels.glob("*.whl")
    subprocess.run(
        [*pip, "install", "--no-deps", "--target", str(target), str(wheel)],
        cwd=tmp_path,
        check=True,
        timeout=120,
    )
    # The libraries come from this environment, the program from the wheel: a folder on the
    # path is found before what an editable install adds.
    code = (
        f"import sys; sys.path.insert(0, {str(target)!r})\n"
        "import pulsetally.sequencer.cli as cli\n"
        f"assert cli.__file__.startswith({str(target)!r}), cli.__file__\n"
        "sys.argv = ['pulsetally', 'check', 'step_and_read', '--json']\n"
        "cli.main()\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert '"rounds": 5' in done.stdout
    names = {path.name for path in (target / "pulsetally").iterdir()}
    assert {"sequencer", "drivers", "simulators", "recipes"} <= names
    assert (target / "pulsetally" / "sequencer" / "analysis" / "counting.py").exists()
    assert (target / "pulsetally" / "drivers" / "py.typed").exists()
    recipes = {path.name for path in (ROOT / "recipes").glob("*.*")}
    assert {path.name for path in (target / "pulsetally" / "recipes").glob("*.*")} == recipes
    assert {"recipe.schema.json", "bench.schema.json", "full_count.yaml"} <= recipes
    tables = {path.name for path in (ROOT / "simulators" / "tables").glob("*.yaml")}
    installed = target / "pulsetally" / "simulators" / "tables"
    assert {path.name for path in installed.iterdir()} == tables
    assert "six_pulses.yaml" in tables
