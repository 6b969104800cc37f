"""Rules of the house that no general tool checks. Each gives offences as lines of text.

To add a rule: a function of the repository's folder here, and in test_house.py a check of the real
tree and a deliberate defect that trips it.
"""

from __future__ import annotations

import ast
import fnmatch
import re
from collections.abc import Iterator
from pathlib import Path

LONGEST_FILE = 399
LONGEST_FUNCTION = 59

# Each package may import from those behind it in this list, and from the modules beside them.
LAYERS = (
    "cli",
    "report",
    "batch",
    "acceptance",
    "transmit",
    "results",
    "metrics",
    "receiver",
    "recording",
    "link",
    "signal",
)
BESIDE = ("errors", "kernels")
# Transmitter and receiver check each other: what one computes, the other must not lend it.
APART = {("transmit", "receiver"), ("transmit", "metrics"), ("transmit", "results")}
KERNEL_LIBRARIES = {"__future__", "collections", "math", "numba", "numpy", "typing"}

TOP_LEVEL = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    "LICENSE",
    "src",
    "tests",
    "captures_demo",
    "tools",
}

# Written in pieces, so that this file does not contain what it looks for.
FORBIDDEN = [
    "".join(pieces)
    for pieces in (
        (r"\btrans", r"cripts?\b"),
        (r"\bseed", r" document"),
        (r"\bassist", r"ants?\b"),
        (r"\bhel", r"per session"),
        (r"\blanguage", r" model"),
        (r"\bC", r"EO\b"),
        (r"\bissue", r" #?\d"),
        (r"(?<![\w.])/wo", r"rk/"),
        (r"(?<![\w.])/fa", r"rm/"),
        (r"(?<![\w.])/tm", r"p/"),
        (r"(?<![\w./])/ho", r"me/\w"),
        (r"(?<![\w./])/ro", r"ot/"),
        (r"(?<![\w./])\bsha", r"red/"),
        (r"\bpypi", r"\.org"),
        (r"\bpython", r"hosted"),
        (r"\bproxy\.", r"golang"),
    )
]
EXCUSES = [
    "".join(pieces)
    for pieces in (
        (r"#\s*no", r"qa(:\s*[A-Z0-9, ]+)?\s*$"),
        (r"#\s*type:\s*ig", r"nore(\[[\w, -]*\])?\s*$"),
        (r"\bx", r"fail\b"),
        (r"mark\.sk", r"ip\b"),
        (r"pytest\.sk", r"ip\("),
    )
]


def ignored_patterns(root: Path) -> list[str]:
    """Names that the version control leaves out."""
    file = root / ".gitignore"
    lines = file.read_text(encoding="utf-8").split() if file.is_file() else []
    return [line.strip("/") for line in lines] + [".git"]


def files(root: Path) -> Iterator[Path]:
    """All files of the repository that are not ignored."""
    patterns = ignored_patterns(root)
    for entry in sorted(root.iterdir()):
        if any(fnmatch.fnmatch(entry.name, p) for p in patterns):
            continue
        if entry.is_dir():
            yield from _below(entry, patterns)
        else:
            yield entry


def _below(folder: Path, patterns: list[str]) -> Iterator[Path]:
    for entry in sorted(folder.iterdir()):
        if any(fnmatch.fnmatch(entry.name, p) for p in patterns):
            continue
        if entry.is_dir():
            yield from _below(entry, patterns)
        else:
            yield entry


def python_files(root: Path, *folders: str) -> Iterator[Path]:
    """Python files below some top-level folders."""
    wanted = folders or ("src", "tests", "tools")
    for path in files(root):
        if path.suffix == ".py" and path.relative_to(root).parts[0] in wanted:
            yield path


def _tree(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def long_files(root: Path) -> list[str]:
    """Files that no longer hold one idea."""
    return [
        f"{path.relative_to(root)}: {n} lines"
        for path in python_files(root)
        if (n := len(path.read_text(encoding="utf-8").splitlines())) > LONGEST_FILE
    ]


def long_functions(root: Path) -> list[str]:
    """Functions whose body does not fit a screen; docstring and parameters are not counted."""
    found = []
    for path in python_files(root):
        for node in ast.walk(_tree(path)):
            if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
                n = _lines(node)
                if n > LONGEST_FUNCTION:
                    found.append(f"{path.relative_to(root)}:{node.lineno} {node.name}: {n} lines")
    return found


def _lines(node: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """Lines of the body: a command's parameter list is its table of options, not code to read."""
    body = node.body[1:] if ast.get_docstring(node) is not None else node.body
    if not body:
        return 0
    return (node.end_lineno or node.lineno) - body[0].lineno + 1


def imported(path: Path) -> Iterator[tuple[int, str]]:
    """Line and dotted name of every import, those inside functions included."""
    for node in ast.walk(_tree(path)):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            if module == "spatiq":
                yield from ((node.lineno, f"spatiq.{alias.name}") for alias in node.names)
            else:
                yield node.lineno, module


def wrong_way_imports(root: Path) -> list[str]:
    """Imports against the order of LAYERS, between packages kept APART, or relative ones."""
    found = []
    source = root / "src" / "spatiq"
    for path in python_files(root, "src"):
        package = path.relative_to(source).parts[0].removesuffix(".py")
        for line, name in imported(path):
            place = f"{path.relative_to(root)}:{line}"
            if name.startswith("."):
                found.append(f"{place}: relative import")
            if not name.startswith("spatiq."):
                continue
            other = name.split(".")[1]
            if package != other and not _may_import(package, other):
                found.append(f"{place}: {package} imports {other}")
    return found


def _may_import(package: str, other: str) -> bool:
    if other == "__version__":
        return True
    if package in LAYERS:
        if other in LAYERS:
            below = LAYERS.index(package) < LAYERS.index(other)
            return below and (package, other) not in APART
        return other in BESIDE
    # errors and kernels know nobody; the package's own modules may start the program.
    return package == "__main__" and other == "cli"


def unknown_packages(root: Path) -> list[str]:
    """Packages that have no place in the order."""
    source = root / "src" / "spatiq"
    names = {p.relative_to(source).parts[0] for p in python_files(root, "src")}
    modules = {f"{name}.py" for name in (*BESIDE, "__init__", "__main__")}
    return sorted(names - set(LAYERS) - modules)


def talkative_kernels(root: Path) -> list[str]:
    """Kernel files that know more than bare arrays: of the package, only kernels and constants."""
    found = []
    for path in python_files(root, "src"):
        if not path.name.endswith("_kernels.py"):
            continue
        for node in ast.walk(_tree(path)):
            if not isinstance(node, ast.Import | ast.ImportFrom):
                continue
            module = node.module or "" if isinstance(node, ast.ImportFrom) else ""
            names = [alias.name for alias in node.names]
            foreign = [n for n in names if not _fit_for_kernels(root, module, n)]
            found += [f"{path.relative_to(root)}:{node.lineno}: {module} {n}" for n in foreign]
    return found


def _fit_for_kernels(root: Path, module: str, name: str) -> bool:
    if not module.startswith("spatiq"):
        return (module or name).split(".")[0] in KERNEL_LIBRARIES
    if module == "spatiq.kernels" or re.fullmatch("[A-Z][A-Z0-9_]*", name):
        return True
    source = root / "src" / Path(*module.split(".")).with_suffix(".py")
    if not source.is_file():
        return False
    body = _tree(source).body
    compilers = {
        alias.asname or alias.name
        for node in body
        if isinstance(node, ast.ImportFrom) and node.module == "spatiq.kernels"
        for alias in node.names
    }
    return any(
        isinstance(node, ast.FunctionDef)
        and node.name == name
        and any(ast.unparse(d) in compilers for d in node.decorator_list)
        for node in body
    )


def stray_entries(root: Path) -> list[str]:
    """What does not belong at the top of the repository."""
    patterns = ignored_patterns(root)
    return [
        entry.name
        for entry in sorted(root.iterdir())
        if entry.name not in TOP_LEVEL
        and not entry.name.startswith(".")
        and not any(fnmatch.fnmatch(entry.name, p) for p in patterns)
    ]


def _matching(root: Path, paths: Iterator[Path], patterns: list[str]) -> list[str]:
    pattern = re.compile("|".join(patterns), re.IGNORECASE | re.MULTILINE)
    found = []
    for path in paths:
        data = path.read_bytes()
        if b"\0" in data:
            continue  # samples, not text
        text = data.decode("utf-8")
        for match in pattern.finditer(text):
            line = text.count("\n", 0, match.start()) + 1
            found.append(f"{path.relative_to(root)}:{line}: {match[0]!r}")
    return found


def forbidden_words(root: Path) -> list[str]:
    """Words and paths that speak of something other than the project."""
    return _matching(root, files(root), FORBIDDEN)


def excuses(root: Path) -> list[str]:
    """Checks switched off without a reason beside it, and tests left out."""
    return _matching(root, python_files(root), EXCUSES)


def swallowed(root: Path) -> list[str]:
    """Handlers of any exception whatever that do not raise it again."""
    found = []
    for path in python_files(root):
        for node in ast.walk(_tree(path)):
            if isinstance(node, ast.ExceptHandler) and _catches_all(node):
                last = node.body[-1]
                if not (isinstance(last, ast.Raise) and last.exc is None):
                    found.append(f"{path.relative_to(root)}:{node.lineno}")
    return found


def _catches_all(handler: ast.ExceptHandler) -> bool:
    if handler.type is None:
        return True
    names = {n.id for n in ast.walk(handler.type) if isinstance(n, ast.Name)}
    return bool(names & {"Exception", "BaseException"})


def undocumented(root: Path) -> list[str]:
    """Public modules, classes and functions of the package without a docstring."""
    found = []
    for path in python_files(root, "src"):
        tree = _tree(path)
        if ast.get_docstring(tree) is None:
            found.append(f"{path.relative_to(root)}: module")
        found += [f"{path.relative_to(root)}: {name}" for name in _bare(tree)]
    return found


def _bare(parent: ast.Module | ast.ClassDef) -> Iterator[str]:
    for node in parent.body:
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            continue
        # Special methods do what the language says they do; ruff asks for those, too, where wise.
        if node.name.startswith("_"):
            continue
        if ast.get_docstring(node) is None:
            yield node.name
        if isinstance(node, ast.ClassDef):
            yield from (f"{node.name}.{name}" for name in _bare(node))
