"""The public surface: the names that are documented, lazily loaded, and never shadowed by a module."""

import inspect
import subprocess
import sys
from pathlib import Path

import pytest

import pathplan

ROOT = Path(__file__).parents[1]
DOCUMENTED = {
    "functions": [
        *("audit", "find_remedies", "load_arm", "load_task", "lower_bound", "plan"),
        *("read_table", "retime", "schedule", "write_table"),
    ],
    "classes": ["Arm", "Audit", "JointPath", "JointTable", "Plan", "Task", "Timing"],
    "errors": ["InputError", "LimitError", "PathplanError", "UnreachableError"],
}
# What scripts rely on beyond the names themselves.
MEMBERS = {
    "Arm": ["name", "joints", "forward", "jacobian", "inverse", "toolbox"],
    "Task": ["arm"],
    "Plan": ["task", "duration", "bound", "path", "table", "audit", "rows"],
    "JointPath": ["length", "joints", "through", "__call__"],
    "Timing": ["duration", "__call__"],
    "JointTable": [
        *("time", "position", "velocity", "acceleration", "jerk", "torque", "step", "joint_names"),
        *("pose", "tool_speed", "marks", "meta", "cycle"),
    ],
    "Audit": ["passed", "joints", "findings", "to_dict"],
}


def fresh(code: str) -> str:
    """What code prints in a process of its own."""
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, timeout=120)
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_all_is_what_is_documented():
    assert sorted(pathplan.__all__) == sorted(name for names in DOCUMENTED.values() for name in names)
    assert set(pathplan.__all__) <= set(dir(pathplan))


def test_kinds_of_names():
    assert all(inspect.isfunction(getattr(pathplan, name)) for name in DOCUMENTED["functions"])
    assert all(inspect.isclass(getattr(pathplan, name)) for name in DOCUMENTED["classes"] + DOCUMENTED["errors"])
    assert all(getattr(pathplan, name).__doc__ for name in pathplan.__all__)


def test_tree_of_errors():
    assert issubclass(pathplan.PathplanError, Exception)
    for name in ("InputError", "UnreachableError", "LimitError"):
        assert getattr(pathplan, name).__bases__ == (pathplan.PathplanError,)


@pytest.mark.parametrize("name", MEMBERS)
def test_members(name):
    owner = getattr(pathplan, name)
    known = set(dir(owner)) | set(getattr(owner, "__dataclass_fields__", ()))
    assert [member for member in MEMBERS[name] if member not in known] == []


@pytest.mark.parametrize(
    ("name", "keywords"),
    [
        ("schedule", ["velocity", "acceleration", "jerk"]),
        ("audit", ["plan"]),
        ("plan", ["progress"]),
        ("retime", ["tolerance", "cycle", "rest"]),
        ("write_table", ["overwrite"]),
    ],
)
def test_options_are_keywords_alone(name, keywords):
    parameters = inspect.signature(getattr(pathplan, name)).parameters
    only = [key for key, value in parameters.items() if value.kind is inspect.Parameter.KEYWORD_ONLY]
    assert [key for key in keywords if key not in only] == []


def test_import_alone_is_light():
    heavy = "{'numpy', 'scipy', 'matplotlib', 'roboticstoolbox', 'spatialmath'}"
    assert fresh(f"import sys, pathplan; print(sorted({heavy} & set(sys.modules)))") == "[]"


def test_planning_without_dynamics_loads_no_robotics_library():
    code = (
        "import sys, pathplan; pathplan.load_task('examples/loader4-belt-to-car.toml'); pathplan.plan; pathplan.audit; "
        "print(sorted({'matplotlib', 'roboticstoolbox', 'spatialmath'} & set(sys.modules)))"
    )
    assert fresh(code) == "[]"


def test_modules_do_not_shadow_functions():
    """Whatever is imported first: `pathplan.plan` and `pathplan.audit` stay the functions."""
    code = (
        "import importlib, inspect, pkgutil, pathplan\n"
        "for found in pkgutil.walk_packages(pathplan.__path__, 'pathplan.'):\n"
        "    if not found.name.endswith('__main__'):\n"
        "        importlib.import_module(found.name)\n"
        f"names = {DOCUMENTED['functions']}\n"
        "print([name for name in names if not inspect.isfunction(getattr(pathplan, name))])"
    )
    assert fresh(code) == "[]"


def test_unknown_name():
    with pytest.raises(AttributeError, match=r"^module 'pathplan' has no attribute 'nothing'$"):
        _ = pathplan.nothing


def test_py_typed_is_there():
    assert (ROOT / "pathplan" / "py.typed").exists()
