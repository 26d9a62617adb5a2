"""The house rules that can be read off the source."""

import ast
import tomllib
from pathlib import Path

ROOT = Path(__file__).parents[1]
PACKAGES = ("solver", "reduce")


def modules(package):
    return sorted((ROOT / package).rglob("*.py"))


def imported(path):
    """Dotted names that a module imports, relative ones as eddyshed's own."""
    parts = ("eddyshed", *path.relative_to(ROOT).with_suffix("").parts)
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = parts[: len(parts) - node.level] if node.level else ()
            name = ".".join([*base, *(node.module or "").split(".")]).rstrip(".")
            yield name
            yield from (f"{name}.{alias.name}" for alias in node.names)


def is_under(name, package):
    return name == package or name.startswith(f"{package}.")


def test_solver_never_imports_reduce():
    for path in modules("solver"):
        assert not [n for n in imported(path) if is_under(n, "eddyshed.reduce")], path


def test_folders_are_imported_under_their_installed_name():
    # `import solver` from the checkout would load every class a second time.
    for package in (*PACKAGES, "tests"):
        for path in modules(package):
            wrong = [n for n in imported(path) for p in PACKAGES if is_under(n, p)]
            assert not wrong, f"{path}: {wrong}"


def test_numerics_of_reduce_know_no_ocean():
    # Only the stages and the command line may bring a config's ocean to life;
    # the rest sees the contract, the record and the errors.
    allowed = {
        "stages.py",
        "preflight.py",
        "cli.py",
        "tables.py",
        "settings.py",
        "evidence.py",
    }
    for path in modules("reduce"):
        if path.name in allowed:
            continue
        for name in imported(path):
            for layer in ("oceans", "spaces", "truth", "stepping", "integrate"):
                bad = is_under(name, f"eddyshed.solver.{layer}")
                if path.name == "truth_stage.py" and layer == "truth":
                    continue  # it runs the members, and builds nothing itself
                assert not bad, f"{path} imports {name}"


def test_only_one_module_knows_pyfftw():
    users = {
        path.relative_to(ROOT).as_posix()
        for package in PACKAGES
        for path in modules(package)
        if any(is_under(n, "pyfftw") for n in imported(path))
    }
    assert users == {"solver/transforms.py"}


def test_packages_are_the_folders_that_hold_modules():
    # An editable install finds a forgotten sub-folder; a wheel would lack it.
    with (ROOT / "pyproject.toml").open("rb") as file:
        table = tomllib.load(file)["tool"]["setuptools"]
    found = {
        "eddyshed." + ".".join(path.parent.relative_to(ROOT).parts): path.parent
        for package in PACKAGES
        for path in (ROOT / package).rglob("__init__.py")
    }
    assert set(table["packages"]) == set(found)
    folders = {name: ROOT / folder for name, folder in table["package-dir"].items()}
    assert folders == found


def test_top_level_is_what_it_is_said_to_be():
    listed = {p.name for p in ROOT.iterdir() if not p.name.startswith(".")}
    expected = {
        "README.md",
        "DEVELOPERS.md",
        "pyproject.toml",
        "solver",
        "reduce",
        "tests",
        "configs",
        "runs",
    }
    # Folders that tools make beside the source and git ignores.
    assert listed - {"build", "dist", "eddyshed.egg-info"} == expected
