"""What importing costs: the names resolve on first use, and nothing heavy is loaded before it is needed."""

from __future__ import annotations

import subprocess
import sys

import pytest

import clingstone

HEAVY = ("statsmodels", "esda", "libpysal", "geopandas", "sklearn", "matplotlib", "pandas", "formulaic")


def _in_fresh_python(code: str) -> str:
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return done.stdout


@pytest.mark.parametrize(
    "code",
    [
        "import clingstone",
        "import clingstone; dir(clingstone); clingstone.Settings(); clingstone.InputError('x')",
        "import clingstone.cli",
        "import clingstone.cli as c\ntry:\n c.main(['--help'])\nexcept SystemExit:\n pass",
        "import clingstone.cli as c\ntry:\n c.main(['examine', '--help'])\nexcept SystemExit:\n pass",
        "import clingstone.results",
    ],
)
def test_nothing_heavy_is_loaded(code: str) -> None:
    loaded = _in_fresh_python(f"import sys\n{code}\nprint('LOADED', *sys.modules)").split("LOADED")[1].split()
    assert "clingstone" in loaded
    assert [name for name in HEAVY if name in loaded] == []


def test_the_help_of_the_command_line_loads_no_numpy() -> None:
    code = "import sys, clingstone.cli as c\ntry:\n c.main(['--help'])\nexcept SystemExit:\n pass\n"
    code += "print('LOADED', *sys.modules)"
    assert "numpy" not in _in_fresh_python(code).split("LOADED")[1].split()


def test_import_alone_does_not_even_load_numpy() -> None:
    loaded = _in_fresh_python("import sys, clingstone; print(*sys.modules)").split()
    assert "numpy" not in loaded
    assert [name for name in loaded if name.startswith("clingstone.")] == []


def test_every_public_name_resolves_to_its_own() -> None:
    for name in clingstone.__all__:
        value = getattr(clingstone, name)
        assert name == "__version__" or value.__name__ == name
    assert dir(clingstone) == sorted(clingstone.__all__)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'exmaine'"):
        clingstone.exmaine  # noqa: B018


def test_examine_is_a_function_even_after_its_home_was_imported() -> None:
    code = "from clingstone.examination import Examination\nfrom clingstone import examine\n"
    code += "import clingstone; print(callable(examine), clingstone.examine is examine)"
    assert _in_fresh_python(code) == "True True\n"


def test_the_version_is_that_of_the_package() -> None:
    from importlib.metadata import version

    assert clingstone.__version__ == version("clingstone")
