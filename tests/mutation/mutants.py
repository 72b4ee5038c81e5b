"""Mutants of a source file: one small change each, made in its syntax tree.

Changed are comparisons, ``and`` and ``or``, ``not``, truth values, whole numbers by one either way, sums and products,
``min`` and ``max``, ``any`` and ``all``, ``break`` and ``continue``, what is returned, and statements left out. Not
changed are annotations, decorators, docstrings and other texts, imports, and what only a type checker runs.
"""

from __future__ import annotations

import ast
import copy
from collections.abc import Iterator
from dataclasses import dataclass

COMPARED: dict[type[ast.cmpop], type[ast.cmpop]] = {
    ast.Lt: ast.LtE, ast.LtE: ast.Lt, ast.Gt: ast.GtE, ast.GtE: ast.Gt, ast.Eq: ast.NotEq, ast.NotEq: ast.Eq,
    ast.In: ast.NotIn, ast.NotIn: ast.In, ast.Is: ast.IsNot, ast.IsNot: ast.Is,
}  # fmt: skip
REVERSED: dict[type[ast.cmpop], type[ast.cmpop]] = {
    ast.Lt: ast.GtE, ast.LtE: ast.Gt, ast.Gt: ast.LtE, ast.GtE: ast.Lt
}  # fmt: skip
COMBINED: dict[type[ast.operator], type[ast.operator]] = {
    ast.Add: ast.Sub, ast.Sub: ast.Add, ast.Mult: ast.Div, ast.Div: ast.Mult, ast.FloorDiv: ast.Mult,
    ast.Mod: ast.FloorDiv, ast.BitAnd: ast.BitOr, ast.BitOr: ast.BitAnd, ast.BitXor: ast.BitAnd,
    ast.LShift: ast.RShift, ast.RShift: ast.LShift, ast.Pow: ast.Mult,
}  # fmt: skip
CALLED = {"min": "max", "max": "min", "any": "all", "all": "any"}


@dataclass(frozen=True)
class Mutant:
    """One change.

    Attributes
    ----------
    file : str
    first, last : int
        Lines of what is changed.
    what : str
        What becomes what.
    node, kind : int
        Which node of the tree, in the order of a walk, and which of its changes.
    """

    file: str
    first: int
    last: int
    what: str
    node: int
    kind: int

    @property
    def name(self) -> str:
        """Where and what."""
        return f"{self.file}:{self.first}: {self.what}"


def skipped(tree: ast.Module) -> set[ast.AST]:
    """Nodes that are left as they are."""
    out: set[ast.AST] = set()

    def leave(node: ast.AST | None) -> None:
        if node is not None:
            out.update(ast.walk(node))

    for node in ast.walk(tree):
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)):
            for decorator in node.decorator_list:
                leave(decorator)
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef)):
            leave(node.returns)
        elif isinstance(node, (ast.arg, ast.AnnAssign)):
            leave(node.annotation)
        elif isinstance(node, (ast.Import, ast.ImportFrom)):
            leave(node)
        elif isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant):
            leave(node)  # a docstring
        elif isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING":
            leave(node)
    return out


def changes(node: ast.AST) -> Iterator[tuple[str, ast.AST]]:
    """Each change of a node: what it is, and the node that takes its place."""
    if isinstance(node, ast.Compare):
        for place, op in enumerate(node.ops):
            for table in (COMPARED, REVERSED):
                if type(op) in table:
                    new = copy.deepcopy(node)
                    new.ops[place] = table[type(op)]()
                    yield said(node, new)
    elif isinstance(node, ast.BoolOp):
        other = ast.Or() if isinstance(node.op, ast.And) else ast.And()
        yield said(node, ast.BoolOp(other, node.values))
    elif isinstance(node, ast.UnaryOp) and isinstance(node.op, (ast.Not, ast.USub)):
        yield said(node, node.operand)
    elif isinstance(node, ast.BinOp) and type(node.op) in COMBINED:
        yield said(node, ast.BinOp(node.left, COMBINED[type(node.op)](), node.right))
    elif isinstance(node, ast.AugAssign) and type(node.op) in COMBINED:
        yield said(node, ast.AugAssign(node.target, COMBINED[type(node.op)](), node.value))
    elif isinstance(node, ast.Constant):
        if isinstance(node.value, bool):
            yield said(node, ast.Constant(not node.value))
        elif isinstance(node.value, int):
            yield said(node, ast.Constant(node.value + 1))
            yield said(node, ast.Constant(node.value - 1))
        elif isinstance(node.value, float):
            yield said(node, ast.Constant(node.value * 1.1 + 0.1))
    elif isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in CALLED:
        yield said(node, ast.Call(ast.Name(CALLED[node.func.id], ast.Load()), node.args, node.keywords))
    elif isinstance(node, (ast.Break, ast.Continue)):
        yield said(node, ast.Continue() if isinstance(node, ast.Break) else ast.Break())
    elif isinstance(node, ast.IfExp):
        yield said(node, ast.IfExp(node.test, node.orelse, node.body))
    if isinstance(node, (ast.If, ast.While)) and not isinstance(node.test, ast.Compare):
        new_if = copy.copy(node)
        new_if.test = ast.UnaryOp(ast.Not(), node.test)
        text = ast.unparse(node.test)
        yield f"if {text} → if not", new_if
    if isinstance(node, ast.Return) and ast.unparse(node.value or ast.Constant(None)) not in ("None", "False"):
        yield f"{short(node)} → return None", ast.Return(ast.Constant(None))
    called = isinstance(node, ast.Expr) and isinstance(node.value, ast.Call)
    if called or isinstance(node, (ast.AugAssign, ast.Raise)):
        yield f"{short(node)} → left out", ast.Pass()


def said(old: ast.AST, new: ast.AST) -> tuple[str, ast.AST]:
    """A change in words."""
    return f"{short(old)} → {short(new)}", new


def short(node: ast.AST) -> str:
    """Source of a node on one line."""
    text = " ".join(ast.unparse(node).split())
    return text if len(text) <= 60 else f"{text[:59]}…"


def mutants_of(file: str, source: str) -> list[Mutant]:
    """Every mutant of a file, in the order of its tree."""
    tree = ast.parse(source)
    left = skipped(tree)
    out = []
    for n, node in enumerate(ast.walk(tree)):
        if node in left or not hasattr(node, "lineno"):
            continue
        for kind, (what, _) in enumerate(changes(node)):
            last = node.test.end_lineno if isinstance(node, (ast.If, ast.While)) else node.end_lineno  # type: ignore[attr-defined]  # all with a line have an end
            out.append(Mutant(file, node.lineno, last or node.lineno, what, n, kind))
    return out


def changed(tree: ast.Module, mutant: Mutant) -> ast.Module:
    """A copy of the tree with the change made."""
    tree = copy.deepcopy(tree)
    old = next(node for n, node in enumerate(ast.walk(tree)) if n == mutant.node)
    new = next(new for kind, (_, new) in enumerate(changes(old)) if kind == mutant.kind)

    class Swap(ast.NodeTransformer):
        def visit(self, node: ast.AST) -> ast.AST:
            return ast.copy_location(new, node) if node is old else self.generic_visit(node)

    Swap().visit(tree)  # a module stays one: it is changed in place
    return ast.fix_missing_locations(tree)


def mutated(source: str, mutant: Mutant) -> str:
    """The source with the change made; comments and layout are lost."""
    return ast.unparse(changed(ast.parse(source), mutant)) + "\n"
