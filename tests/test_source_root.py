"""The source root is called ``inspect``: Python's own module of that name must still be found."""

import subprocess
import sys
from pathlib import Path

REPOSITORY = Path(__file__).parents[1]
PROGRAM = "import inspect; print(inspect.__file__); inspect.signature(print)"


def test_pythons_own_inspect_is_found_from_the_repository_root():
    found = subprocess.run(
        [sys.executable, "-c", PROGRAM], cwd=REPOSITORY, capture_output=True, text=True, check=True
    )
    assert Path(found.stdout.strip()).parent == Path(sys.base_prefix, "lib").joinpath(
        f"python{sys.version_info.major}.{sys.version_info.minor}"
    )


def test_pythons_own_inspect_is_found_under_pytest_and_by_module_runs():
    import inspect

    assert REPOSITORY not in Path(inspect.__file__).parents
    subprocess.run(
        [sys.executable, "-m", "dataclasses"], cwd=REPOSITORY, check=True, capture_output=True
    )


def test_the_source_root_is_no_package():
    assert not (REPOSITORY / "inspect" / "__init__.py").exists()
