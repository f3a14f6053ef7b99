"""How the three packages hang together: imports downhill only, public names, light imports, and the wheel."""

from __future__ import annotations

import ast
import os
import shutil
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import pytest

import fitcore
import likelihoods
import observables

ROOT = Path(__file__).parent.parent
PACKAGES = ("fitcore", "likelihoods", "observables")
#: Not needed to show a help text; each costs more than the help text itself.
HEAVY = ("numpy", "scipy", "matplotlib", "iminuit", "emcee", "h5py", "pint", "rich", "jinja2", "dask", "pdg")


def modules(package):
    return sorted(path for path in (ROOT / package).rglob("*.py") if "__pycache__" not in path.parts)


def imported(path):
    """Absolute names of all that a module imports, in functions too, with their lines."""
    package = path.relative_to(ROOT).parent.parts
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) + 1 - node.level]) if node.level else ""
            module = ".".join(part for part in (base, node.module) if part)
            yield from ((f"{module}.{alias.name}", node.lineno) for alias in node.names)


def uphill(path):
    """What a module may not import."""
    package, *inside = path.relative_to(ROOT).with_suffix("").parts
    forbidden = {"observables": ("likelihoods", "fitcore"), "likelihoods": ("fitcore",), "fitcore": ()}[
        package
    ]
    if package == "fitcore" and inside != ["problem"] and inside[0] != "commands":
        forbidden = ("likelihoods", "observables")
    for name, line in imported(path):
        top = name.split(".")[0]
        everyone_may = name.startswith("observables.errors.")
        if (top in forbidden and not everyone_may) or top in ("tests", "demo_inputs", "notebooks"):
            yield f"{path.relative_to(ROOT)}:{line}: imports {name}"


@pytest.mark.parametrize("package", PACKAGES)
def test_imports_run_downhill(package):
    found = [fault for path in modules(package) for fault in uphill(path)]
    assert not found, "\n".join(found)


def test_an_import_uphill_is_found(tmp_path, monkeypatch):
    monkeypatch.setattr(sys.modules[__name__], "ROOT", tmp_path)
    cases = {
        "observables/planted.py": "def f():\n    import fitcore.problem\n",
        "observables/other.py": "from likelihoods import Entry\n",
        "likelihoods/planted.py": "from fitcore.result import FitResult\n",
        "fitcore/minimise/planted.py": "from observables import catalogue\nfrom observables.errors import InputError\n",
        "fitcore/studies/planted.py": "import likelihoods\n",
    }
    for name, text in cases.items():
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text)
        assert len(list(uphill(path))) == 1, name
    for name in ("fitcore/problem.py", "fitcore/commands/planted.py"):
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text("from observables import catalogue\nfrom likelihoods import Entry\n")
        assert not list(uphill(path)), name


def test_no_module_reads_another_ones_private_names():
    found = [
        f"{path.relative_to(ROOT)}:{line}: imports {name}"
        for package in PACKAGES
        for path in modules(package)
        for name, line in imported(path)
        if name.split(".")[0] in PACKAGES
        and name.split(".")[-1].startswith("_")
        and not name.split(".")[-1].startswith("__")
        and name.split(".")[0] != package
    ]
    assert not found, "\n".join(found)


def test_no_catch_all_modules():
    names = {path.stem for package in PACKAGES for path in modules(package)}
    assert not names & {"utils", "util", "helpers", "helper", "common", "misc"}


# -- public names --------------------------------------------------------------------------------------------


PUBLIC = {
    fitcore: {"FitResult", "Problem", "__version__"},
    likelihoods: {
        "Average", "Block", "Correlation", "CorrelationBlock", "Declared", "Entry", "Inputs", "Notice",
        "ParameterSetting", "Prior", "Terms", "average", "bundled_names", "bundled_path", "load_inputs",
    },
    observables: {
        "Catalogue", "Complex", "Hypothesis", "Real", "catalogue", "constant", "parameter", "quantity",
    },
}  # fmt: skip


@pytest.mark.parametrize("package", PUBLIC, ids=lambda package: package.__name__)
def test_public_names(package):
    assert set(package.__all__) == PUBLIC[package]
    assert len(package.__all__) == len(set(package.__all__))
    for name in package.__all__:
        assert getattr(package, name) is not None
    with pytest.raises(AttributeError, match="no_such_name"):
        _ = package.no_such_name


def test_every_module_names_only_what_it_has():
    """`__all__` of every module that has one, read without importing it."""
    found = []
    for package in PACKAGES:
        for path in modules(package):
            tree = ast.parse(path.read_text(encoding="utf-8"))
            names = {n.id for n in ast.walk(tree) if isinstance(n, ast.Name) and isinstance(n.ctx, ast.Store)}
            names |= {n.name for n in tree.body if isinstance(n, ast.FunctionDef | ast.ClassDef)}
            names |= {
                (a.asname or a.name)
                for n in ast.walk(tree)
                if isinstance(n, ast.Import | ast.ImportFrom)
                for a in n.names
            }
            for node in tree.body:
                if isinstance(node, ast.Assign) and any(
                    getattr(t, "id", "") == "__all__" for t in node.targets
                ):
                    missing = [name for name in ast.literal_eval(node.value) if name not in names]
                    found += [f"{path.relative_to(ROOT)}: {name}" for name in missing]
    assert not found, "\n".join(found)


def test_the_version_is_written_once_too_often_and_the_same():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert project["version"] == fitcore.__version__


def test_the_licence_and_the_readme_are_there():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert (ROOT / project["readme"]).is_file()
    assert all((ROOT / name).is_file() for name in project["license-files"])


# -- light imports -------------------------------------------------------------------------------------------


def python(code, *folders, cwd=None):
    """Run code in a fresh interpreter that sees only these folders first."""
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(map(str, folders)), "PYTHONWARNINGS": "error"}
    return subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment, cwd=cwd, timeout=120
    )


def loaded_after(code, names):
    report = f"\nimport sys\nprint('loaded:', *[n for n in {names!r} if n in sys.modules])"
    done = python(code + report, ROOT)
    assert done.returncode == 0, done.stderr
    return done.stdout.rpartition("loaded:")[2].split()


def test_fitcore_alone_imports_nothing_heavy():
    assert loaded_after("import fitcore\nfitcore.__version__", HEAVY) == []


def test_help_imports_nothing_heavy():
    code = "\n".join(
        [
            "from fitcore.commands.main import cli",
            "try:",
            "    cli(['--help'])",
            "except SystemExit as end:",
            "    assert not end.code",
        ]
    )
    assert loaded_after(code, (*HEAVY, "observables", "likelihoods")) == []


def test_the_catalogue_and_the_inputs_need_numpy_alone():
    heavy = [name for name in HEAVY if name not in ("numpy", "scipy")]
    assert loaded_after("import observables, likelihoods", [*heavy, "scipy.optimize", "scipy.stats"]) == []


def test_a_problem_needs_no_figures_and_no_minimiser():
    code = "from fitcore import Problem, FitResult"
    assert (
        loaded_after(code, ["matplotlib", "iminuit", "emcee", "h5py", "rich", "jinja2", "scipy.optimize"])
        == []
    )


# -- somebody else's package of that name --------------------------------------------------------------------


SOMEONE_ELSES = '"""Observables of another kind."""\n\nclass Observable:\n    pass\n'


@pytest.mark.parametrize("code", ["from fitcore import Problem", "from fitcore.commands.main import cli"])
def test_a_foreign_observables_in_front_is_named(tmp_path, code):
    (tmp_path / "observables").mkdir()
    (tmp_path / "observables" / "__init__.py").write_text(SOMEONE_ELSES)
    done = python(code, tmp_path, ROOT, cwd=tmp_path)
    assert done.returncode != 0
    last = done.stderr.strip().splitlines()[-1]
    assert "ImportError" in last
    assert str(tmp_path / "observables") in last
    assert "another package called 'observables'" in last
    assert "pip uninstall observables" in last


def test_a_foreign_observables_written_over_ours_is_named(tmp_path):
    for package in PACKAGES:
        shutil.copytree(ROOT / package, tmp_path / package, ignore=shutil.ignore_patterns("__pycache__"))
    assert python("from fitcore import Problem", tmp_path, cwd=tmp_path).returncode == 0
    (tmp_path / "observables" / "__init__.py").write_text(SOMEONE_ELSES)
    done = python("from fitcore import Problem", tmp_path, cwd=tmp_path)
    assert "another package called 'observables'" in done.stderr.strip().splitlines()[-1]


def test_a_missing_observables_is_named(tmp_path):
    for package in ("fitcore", "likelihoods"):
        shutil.copytree(ROOT / package, tmp_path / package, ignore=shutil.ignore_patterns("__pycache__"))
    code = (
        "import os, sys\n"
        "sys.path = [p for p in sys.path if not os.path.isdir(os.path.join(p, 'observables'))]\n"
        "sys.meta_path = [f for f in sys.meta_path if 'editable' not in repr(f).lower()]\n"
        "import fitcore"
    )
    done = python(code, tmp_path, cwd=tmp_path)
    assert "the package 'observables' of weakmix is missing" in done.stderr.strip().splitlines()[-1]


# -- the wheel -----------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    pytest.importorskip("build")
    pytest.importorskip("hatchling")
    folder = tmp_path_factory.mktemp("wheel")
    done = subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", str(folder), str(ROOT)],
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert done.returncode == 0, done.stderr + done.stdout
    (path,) = folder.glob("*.whl")
    return path


def test_the_wheel_holds_the_three_packages_and_nothing_else(wheel):
    names = zipfile.ZipFile(wheel).namelist()
    tops = {name.split("/")[0] for name in names}
    assert tops == {*PACKAGES, f"weakmix-{fitcore.__version__}.dist-info"}
    assert not [name for name in names if name.endswith((".pyc", "~", ".orig")) or "test" in Path(name).name]


def test_the_wheel_holds_every_module_and_data_file(wheel):
    names = set(zipfile.ZipFile(wheel).namelist())
    for package in PACKAGES:
        for path in (ROOT / package).rglob("*"):
            if path.is_file() and "__pycache__" not in path.parts:
                assert path.relative_to(ROOT).as_posix() in names
    demo = {name.rpartition("/")[2] for name in names if name.startswith("likelihoods/demo_inputs/")}
    assert {path.name for path in (ROOT / "demo_inputs").iterdir() if path.suffix == ".toml"} <= demo
    assert "tidewater.toml" in demo


def test_the_wheel_says_what_it_is(wheel):
    archive = zipfile.ZipFile(wheel)
    info = f"weakmix-{fitcore.__version__}.dist-info"
    metadata = archive.read(f"{info}/METADATA").decode()
    assert f"\nVersion: {fitcore.__version__}\n" in metadata
    assert "\nName: weakmix\n" in metadata
    assert "weakmix = fitcore.commands.main:main" in archive.read(f"{info}/entry_points.txt").decode()
    assert wheel.name.endswith("-py3-none-any.whl")


def test_the_wheel_works_from_elsewhere(wheel, tmp_path):
    zipfile.ZipFile(wheel).extractall(tmp_path)
    code = (
        "from fitcore import Problem\nimport fitcore, likelihoods\nprint(fitcore.__file__)\n"
        "for name in likelihoods.bundled_names(): Problem.load(name)\nprint(*likelihoods.bundled_names())"
    )
    done = python(code, tmp_path, cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    where, names = done.stdout.strip().splitlines()
    assert where.startswith(str(tmp_path))
    assert {"averages-2026", "world-2026", "tidewater"} <= set(names.split())
