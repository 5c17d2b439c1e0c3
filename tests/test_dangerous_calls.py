"""Nothing in the package turns what it reads into code, objects or commands."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "labkit"

# Called under these names, or as these attributes, wherever they come from.
CODE = {"eval", "exec", "compile", "__import__", "execfile", "run_path", "system", "popen", "startfile"}
OBJECTS = {"pickle", "cPickle", "cloudpickle", "dill", "joblib", "marshal", "shelve", "jsonpickle"}
ARCHIVES = {"tarfile", "zipfile", "shutil.unpack_archive", "unpack_archive"}
YAML_READERS = {"load", "load_all", "full_load", "full_load_all", "unsafe_load", "unsafe_load_all"}

# Where a thing stands that looks like one of these, and why it is none.
EXCEPTIONS = {
    ("policies/own_rule.py", "compile"): "numba's compiler, for the rule that the user wrote in the session",
    ("sharing/cluster.py", "cloudpickle"): "tasks for workers of the user's own cluster, never from a file",
    ("sharing/work.py", "cloudpickle"): "the same",
    ("sharing/replicates.py", "compile"): "numba's compiler, for a rule of labkit's",
    ("sharing/work.py", "compile"): "numba's compiler, for a rule of labkit's",
}


def name_of(node: ast.expr) -> str:
    return node.attr if isinstance(node, ast.Attribute) else node.id if isinstance(node, ast.Name) else ""


def faults_in(source: str) -> list[tuple[int, str]]:
    """Return the line and the word of each dangerous call or import."""
    found = []
    tree = ast.parse(source)
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found += [(node.lineno, each.name) for each in node.names if _forbidden(each.name)]
        elif isinstance(node, ast.ImportFrom):
            whole = node.module or ""
            found += [(node.lineno, whole)] * _forbidden(whole)
            found += [(node.lineno, each.name) for each in node.names if each.name in CODE | ARCHIVES]
        elif isinstance(node, ast.Call):
            word = name_of(node.func)
            keywords = {each.arg: each.value for each in node.keywords}
            regex = isinstance(node.func, ast.Attribute) and name_of(node.func.value) == "re"
            if (word in CODE and not (regex and word == "compile")) or word == "unpack_archive":
                found.append((node.lineno, word))
            if (
                isinstance(node.func, ast.Attribute)
                and name_of(node.func.value) == "yaml"
                and word in YAML_READERS
            ):
                found.append((node.lineno, f"yaml.{word}"))
            for key in ("shell", "allow_pickle"):
                value = keywords.get(key)
                if value is not None and not (isinstance(value, ast.Constant) and value.value is False):
                    found.append((node.lineno, key))
            if word in ("read_pickle", "to_pickle") or (
                word == "load" and name_of(getattr(node.func, "value", ast.Name(""))) in ("np", "numpy")
            ):
                found.append((node.lineno, word))
    return found


def _forbidden(module: str) -> bool:
    return module.split(".")[0] in OBJECTS | ARCHIVES


def test_nothing_read_becomes_code_objects_or_commands():
    used, faults = set(), []
    for path in sorted(PACKAGE.rglob("*.py")):
        where = path.relative_to(PACKAGE).as_posix()
        for line, word in faults_in(path.read_text(encoding="utf-8")):
            used.add((where, word))
            if (where, word) not in EXCEPTIONS:
                faults.append(f"{where}:{line}: {word}")
    assert faults == []
    assert set(EXCEPTIONS) <= used, "an exception that is not needed any more"


@pytest.mark.parametrize(
    "source",
    [
        "eval(text)",
        "builtins.exec(text)",
        "compile(text, '', 'exec')",
        "os.system(text)",
        "subprocess.run(text, shell=True)",
        "subprocess.run(text, shell=flag)",
        "import pickle",
        "from pickle import loads",
        "import cloudpickle.utils",
        "np.load(path, allow_pickle=True)",
        "np.load(path)",
        "pd.read_pickle(path)",
        "yaml.load(text)",
        "yaml.unsafe_load(text)",
        "import tarfile",
        "shutil.unpack_archive(path)",
        "from os import system",
    ],
)
def test_a_breach_is_named(source):
    assert faults_in(source)


@pytest.mark.parametrize(
    "source",
    ["re.compile('a')", "yaml.safe_load(text)", "json.loads(text)", "subprocess.run(words, shell=False)"],
)
def test_what_is_safe_passes(source):
    assert faults_in(source) == []
