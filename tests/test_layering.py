"""The arrows between packages, read from the imports of every file."""

from __future__ import annotations

import ast
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SOURCES = {name: ROOT / name / f"canticle_{name}" for name in ("daemon", "adapters", "overlay")}
TOP = {
    "README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE",
    "daemon", "adapters", "overlay", "tests", "configs",
}  # fmt: skip
FOREIGN = {
    "adapters": {"frame", "adapter_api", "errors", "config"},
    "overlay": {"messages", "errors"},
    "daemon": set(),
}
PURE = ("physics", "stream", "coach", "plan", "track")
PURE_SHARED = {"frame", "messages", "config", "errors"}
PURE_THIRD = {"numpy", "scipy", "msgspec", "pydantic"}
PURE_STDLIB = {
    "__future__", "collections", "dataclasses", "enum", "functools", "itertools", "math",
    "operator", "re", "types", "typing",
}  # fmt: skip
LOADERS = {"track/profile.py", "track/opendrive.py", "physics/car.py"}
"""These also read their file, so they may know what a path is."""
FORBIDDEN = {
    "socket", "zmq", "time", "logging", "os", "threading", "subprocess", "multiprocessing",
    "asyncio", "random", "sys", "io",
}  # fmt: skip


def modules_in(text: str) -> Iterator[str]:
    """Yield the full dotted name of everything a module imports, wherever in it."""
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "relative imports hide the arrows"
            assert node.module is not None
            if node.module.startswith("canticle_") and "." not in node.module:
                yield from (f"{node.module}.{alias.name}" for alias in node.names)
            else:
                yield node.module


def files_of(folder: Path) -> list[Path]:
    return sorted(folder.rglob("*.py"))


def imports(path: Path) -> set[str]:
    return set(modules_in(path.read_text(encoding="utf-8")))


def foreign_to(name: str, modules: set[str]) -> set[str]:
    """Return what files of one top folder import of the other two, and may not."""
    found = set()
    for module in modules:
        package, _, rest = module.partition(".")
        if not package.startswith("canticle_") or package == f"canticle_{name}":
            continue
        allowed = package == "canticle_daemon" and rest.split(".")[0] in FOREIGN[name]
        if not allowed:
            found.add(module)
    return found


def impure(relative: str, modules: set[str]) -> set[str]:
    """Return what a file of a pure package imports, and may not."""
    stdlib = PURE_STDLIB | ({"pathlib"} if relative in LOADERS else set())
    found = set()
    for module in modules:
        package, _, rest = module.partition(".")
        if package == "canticle_daemon":
            good = rest.split(".")[0] in {*PURE, *PURE_SHARED}
        else:
            good = package in PURE_THIRD or package in stdlib
        if not good:
            found.add(module)
    return found


@pytest.mark.parametrize("name", sorted(SOURCES))
def test_a_top_folder_imports_only_what_its_arrows_allow(name: str) -> None:
    wrong = {
        str(path.relative_to(ROOT)): found
        for path in files_of(SOURCES[name])
        if (found := foreign_to(name, imports(path)))
    }
    assert wrong == {}


def test_the_pure_packages_touch_no_system() -> None:
    package = SOURCES["daemon"]
    paths = [path for name in PURE for path in files_of(package / name)]
    assert len(paths) > 10
    wrong = {}
    for path in paths:
        relative = path.relative_to(package).as_posix()
        if found := impure(relative, imports(path)):
            wrong[relative] = found
    assert wrong == {}


def test_the_reader_of_imports_sees_what_it_should() -> None:
    text = (
        "import os.path\n"
        "from canticle_daemon import frame\n"
        "def f():\n"
        "    from canticle_daemon.runtime.udp import Port\n"
    )
    modules = set(modules_in(text))
    assert modules == {"os.path", "canticle_daemon.frame", "canticle_daemon.runtime.udp"}
    assert foreign_to("overlay", modules) == {
        "canticle_daemon.frame", "canticle_daemon.runtime.udp",
    }  # fmt: skip
    assert impure("stream/bank.py", modules) == {"os.path", "canticle_daemon.runtime.udp"}
    assert impure("stream/bank.py", {"pathlib"}) == {"pathlib"}
    assert all(impure("stream/bank.py", {name}) for name in FORBIDDEN)


def test_importing_the_pipeline_loads_no_socket_window_or_voice() -> None:
    code = (
        "import sys; import canticle_daemon.stream.pipeline; "
        "print(*sorted({'zmq', 'pygame', 'pyttsx3', 'typer'} & set(sys.modules)))"
    )
    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert result.stdout.strip() == ""


def test_a_top_folder_is_a_source_root_and_no_package() -> None:
    for name, package in SOURCES.items():
        assert not (ROOT / name / "__init__.py").exists()
        assert (package / "__init__.py").is_file()
        holds = {
            entry.name
            for entry in (ROOT / name).iterdir()
            if entry.name != "__pycache__" and not entry.name.startswith(".")
        }
        assert holds == {package.name}


def test_only_the_agreed_names_are_at_the_top() -> None:
    git = shutil.which("git")
    if git is None or not (ROOT / ".git").exists():
        found = {path.name for path in ROOT.iterdir() if any(path.glob("**/*.py"))}
    else:
        command = [git, "-c", "safe.directory=*", "ls-files"]
        listed = subprocess.run(
            command, cwd=ROOT, capture_output=True, text=True, check=True, timeout=60
        )
        found = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert "daemon" in found
    assert {name for name in found if not name.startswith(".")} <= TOP
