"""A digest of exactly the code a job runs, so that a changed function reruns what uses it.

From the job's function the digest follows every name that is used to its definition in this
package, through all modules, without importing anything. Comments, docstrings and layout do not
count. Names reached only through strings (`getattr`) are not seen; the package has none.
"""

from __future__ import annotations

import ast
import functools
import hashlib
from dataclasses import dataclass, field
from pathlib import Path

import stook

PACKAGE = "stook"
NO_RESULT = frozenset(
    {
        "stook.assessment.crops",
        "stook.assessment.documents",
        "stook.assessment.layout",
        "stook.assessment.load",
        "stook.assessment.schema",
        "stook.assessment.sections",
        "stook.audit.ledger",
        "stook.errors",
        "stook.version",
    }
)
"""Modules that shape no value of a result; settings are digested by value instead."""

Symbol = tuple[str, str]
"""Module and top-level name; the name ``*`` is the whole module."""

WHOLE = "*"


@dataclass
class _Module:
    """What a module defines at top level: nodes by name, imports by local name, and the rest."""

    definitions: dict[str, list[ast.AST]] = field(default_factory=dict)
    imports: dict[str, Symbol] = field(default_factory=dict)
    rest: list[ast.AST] = field(default_factory=list)


def code_digest(module: str, function: str, root: Path | None = None) -> str:
    """Return a digest of a function and of everything of the package that it uses.

    Parameters
    ----------
    module
        Such as ``stook.season.job``.
    function
        Name of a function in it.
    root
        Folder of the package; default: the one that is running.

    Returns
    -------
    str
        8 hexadecimal digits; ``absent`` if there is no such function.
    """
    root = root or Path(stook.__file__).parent
    found = _read(root, module)
    if found is None or function not in found.definitions:
        return "absent"
    digest = hashlib.sha256()
    for name, symbol, text in sorted(_closure(root, (module, function))):
        digest.update(f"{name}\x1f{symbol}\x1f{text}\x1e".encode())
    return digest.hexdigest()[:8]


def _closure(root: Path, start: Symbol) -> list[tuple[str, str, str]]:
    """Return module, name and text of every definition that is reached."""
    pending = [start]
    seen: set[Symbol] = set()
    texts = []
    while pending:
        module, symbol = pending.pop()
        if (module, symbol) in seen or module in NO_RESULT:
            continue
        seen.add((module, symbol))
        own, used = _definition(root, module, symbol)
        texts += own
        pending += used
    return texts


@functools.cache
def _definition(
    root: Path, module: str, symbol: str
) -> tuple[list[tuple[str, str, str]], list[Symbol]]:
    """Return the texts of one name, and the symbols it uses; many jobs share most of them."""
    content = _read(root, module)
    if content is None:
        return [], []
    nodes = _nodes(content, symbol)
    texts = [(module, symbol, _text(node)) for node in nodes]
    used = [(module, "")] if symbol else []
    for node in nodes:
        used += _uses(root, module, content, node)
    if symbol in content.imports and not nodes:
        used.append(content.imports[symbol])
    if not symbol:
        texts += _data_files(root, module)
    return texts, used


def _nodes(content: _Module, symbol: str) -> list[ast.AST]:
    """Return the nodes of a name; the empty name stands for what belongs to no name."""
    if symbol == "":
        return content.rest
    if symbol == WHOLE:
        return [node for nodes in content.definitions.values() for node in nodes]
    return content.definitions.get(symbol, [])


def _uses(root: Path, module: str, content: _Module, node: ast.AST) -> list[Symbol]:
    """Return the symbols of the package that a node uses."""
    local = dict(content.imports)
    for part in ast.walk(node):
        if isinstance(part, ast.Import | ast.ImportFrom):
            local |= _imported(root, part)
    used: list[Symbol] = []
    through: set[int] = set()
    for part in ast.walk(node):
        if isinstance(part, ast.Attribute) and isinstance(part.value, ast.Name):
            target = local.get(part.value.id)
            if target is not None and target[1] == WHOLE:
                used.append((target[0], part.attr))
                through.add(id(part.value))
        elif isinstance(part, ast.Name) and id(part) not in through:
            if part.id in content.definitions:
                used.append((module, part.id))
            elif part.id in local:
                used.append(local[part.id])
    return used


def _imported(root: Path, node: ast.Import | ast.ImportFrom) -> dict[str, Symbol]:
    """Return what an import binds, as symbols of the package."""
    if isinstance(node, ast.Import):
        return {
            alias.asname: (alias.name, WHOLE)
            for alias in node.names
            if alias.asname and alias.name.startswith(f"{PACKAGE}.")
        }
    source = node.module or ""
    if source != PACKAGE and not source.startswith(f"{PACKAGE}."):
        return {}
    result: dict[str, Symbol] = {}
    for alias in node.names:
        inner = f"{source}.{alias.name}"
        whole = _path(root, inner) is not None
        result[alias.asname or alias.name] = (inner, WHOLE) if whole else (source, alias.name)
    return result


def _path(root: Path, module: str) -> Path | None:
    base = root.joinpath(*module.split(".")[1:])
    for path in (base.with_suffix(".py"), base / "__init__.py"):
        if module != PACKAGE and path.is_file():
            return path
    return None


@functools.cache
def _read(root: Path, module: str) -> _Module | None:
    """Parse a module of the package; None if there is none."""
    path = _path(root, module)
    if path is None:
        return None
    result = _Module()
    for node in ast.parse(path.read_text(encoding="utf-8")).body:
        for part in ast.walk(node) if isinstance(node, ast.If | ast.Try) else [node]:
            if isinstance(part, ast.Import | ast.ImportFrom):
                result.imports |= _imported(root, part)
        names = _names(node)
        for name in names:
            result.definitions.setdefault(name, []).append(node)
        if not names and not isinstance(node, ast.Import | ast.ImportFrom):
            result.rest.append(node)
    return result


def _names(node: ast.AST) -> list[str]:
    if isinstance(node, ast.FunctionDef | ast.ClassDef | ast.AsyncFunctionDef):
        return [node.name]
    if isinstance(node, ast.Assign):
        targets = node.targets
    elif isinstance(node, ast.AnnAssign | ast.AugAssign):
        targets = [node.target]
    else:
        return []
    return [p.id for target in targets for p in ast.walk(target) if isinstance(p, ast.Name)]


def _text(node: ast.AST) -> str:
    """Return the code of a node without docstrings, comments and layout."""
    return ast.unparse(_WithoutDocstrings().visit(ast.parse(ast.unparse(node))))


class _WithoutDocstrings(ast.NodeTransformer):
    """Drop every expression statement that is a plain string."""

    def visit_Expr(self, node: ast.Expr) -> ast.AST:
        """Put nothing in the place of a plain string."""
        text = isinstance(node.value, ast.Constant) and isinstance(node.value.value, str)
        return ast.Pass() if text else node


def _data_files(root: Path, module: str) -> list[tuple[str, str, str]]:
    """Return the digests of the files beside a module that are no Python (templates, styles)."""
    path = _path(root, module)
    assert path is not None
    return [
        (module, file.name, hashlib.sha256(file.read_bytes()).hexdigest())
        for file in sorted(path.parent.iterdir())
        if file.is_file() and file.suffix not in {".py", ".pyc"}
    ]
