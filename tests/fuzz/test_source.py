"""What the source never does: unpickle, evaluate text, run a shell, speak to a network by itself."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
FILES = sorted(p for top in ("align", "plugins") for p in (ROOT / top).rglob("*.py"))
NEVER_IMPORTED = {
    "pickle", "cPickle", "dill", "cloudpickle", "joblib", "shelve", "marshal", "socket", "ssl", "http", "urllib",
    "requests", "httpx", "aiohttp", "ftplib", "smtplib", "telnetlib", "xmlrpc", "code", "codeop", "yaml",
}  # fmt: skip
NEVER_CALLED = {"eval", "exec", "compile", "__import__", "system", "popen", "read_pickle", "to_pickle"}


def imported(tree):
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            yield node.module


@pytest.mark.parametrize("path", FILES, ids=lambda p: p.relative_to(ROOT).as_posix())
def test_a_source_file_unpickles_evaluates_and_fetches_nothing(path):
    tree = ast.parse(path.read_text("utf-8"))
    assert {name.split(".")[0] for name in imported(tree)} & NEVER_IMPORTED == set()
    for node in ast.walk(tree):
        if not isinstance(node, ast.Call):
            continue
        name = node.func.id if isinstance(node.func, ast.Name) else getattr(node.func, "attr", "")
        owner = getattr(getattr(node.func, "value", None), "id", "")
        if name == "compile" and owner:  # re.compile
            continue
        assert name not in NEVER_CALLED, f"{path.name}, line {node.lineno}: {name}"
        if name == "load" and owner == "np":
            said = {word.arg: getattr(word.value, "value", None) for word in node.keywords}
            assert said.get("allow_pickle") is False, f"{path.name}, line {node.lineno}: np.load may unpickle"
        assert not any(
            w.arg in ("shell", "allow_pickle") and getattr(w.value, "value", None) is True for w in node.keywords
        )
