"""The formula language of sheets, groups and conditions: a small whitelisted subset of Python expressions.

Numbers, names, + - * / **, unary minus, comparisons (also chained), `sex == "female"`, and / or / not,
`a if condition else b`, true, false, and the functions below. Text is parsed once into nested numpy calls; nothing is
ever handed to the interpreter.
"""

from __future__ import annotations

import ast
import operator
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import reduce

import numpy as np

from covariates.problems import Problem, ProblemsError, nearest

LONGEST_TEXT = 2000
MOST_PARTS = 400
DEEPEST = 60
LARGEST_EXPONENT = 100
LARGEST_NUMBER = 1e15

Lookup = Callable[[str], np.ndarray] | Mapping[str, np.ndarray]
Run = Callable[[dict[str, np.ndarray]], np.ndarray]


def _sigmoid(x: np.ndarray, half: np.ndarray, slope: np.ndarray) -> np.ndarray:
    """x^slope / (x^slope + half^slope), written so that a large power cannot turn it into inf/inf."""
    return 1.0 / (1.0 + (half / x) ** slope)


def _least(*values: np.ndarray) -> np.ndarray:
    return reduce(np.minimum, values)


def _greatest(*values: np.ndarray) -> np.ndarray:
    return reduce(np.maximum, values)


# name -> (function, fewest arguments, most arguments)
FUNCTIONS: dict[str, tuple[Callable, int, int]] = {
    "exp": (np.exp, 1, 1),
    "expm1": (np.expm1, 1, 1),
    "log": (np.log, 1, 1),
    "log10": (np.log10, 1, 1),
    "log1p": (np.log1p, 1, 1),
    "sqrt": (np.sqrt, 1, 1),
    "abs": (np.abs, 1, 1),
    "floor": (np.floor, 1, 1),
    "ceil": (np.ceil, 1, 1),
    "power": (np.power, 2, 2),
    "sigmoid": (_sigmoid, 3, 3),
    "min": (_least, 2, 20),
    "max": (_greatest, 2, 20),
}
_ARITHMETIC = {ast.Add: np.add, ast.Sub: np.subtract, ast.Mult: np.multiply, ast.Div: np.divide, ast.Pow: np.power}
_COMPARISONS = {
    ast.Lt: operator.lt, ast.LtE: operator.le, ast.Gt: operator.gt, ast.GtE: operator.ge,
    ast.Eq: operator.eq, ast.NotEq: operator.ne,
}  # fmt: skip
_CONSTANTS = {"true": np.bool_(True), "false": np.bool_(False)}
_SEXES = ("female", "male")
_LANGUAGE = (
    'numbers, names, + - * / **, comparisons, and / or / not, sex == "female", a if condition else b, true, false, '
    f"and the functions {' '.join(FUNCTIONS)}"
)


@dataclass(frozen=True)
class Formula:
    """A compiled formula.

    text   as written
    where  file and key it stands in
    names  every name it needs
    kind   "number" or "condition"
    uses   pairs (name, "number" | "condition" | "text"): what each name must be when evaluated
    """

    text: str
    where: str
    names: frozenset[str]
    kind: str
    uses: frozenset[tuple[str, str]]
    run: Run = field(repr=False, compare=False)

    def evaluate(self, lookup: Lookup) -> np.ndarray:
        """The values: float64 for a number, bool for a condition, of the shape the names broadcast to.

        lookup  name -> array, as a mapping or a function: numbers as floats or integers, switches as bool, sex as text

        Raises ProblemsError where a name is missing or is not what the formula takes it for. Arithmetic never raises:
        a division by zero or the logarithm of a negative number gives inf or NaN.
        """
        values = {name: self._fetch(name, lookup) for name in self.names}
        problems = [problem for name, use in sorted(self.uses) if (problem := self._misfit(name, use, values[name]))]
        if problems:
            raise ProblemsError(problems)
        values = {name: value.astype(float) if value.dtype.kind in "iu" else value for name, value in values.items()}
        with np.errstate(all="ignore"):
            return np.asarray(self.run(values))

    def _fetch(self, name: str, lookup: Lookup) -> np.ndarray:
        if not isinstance(lookup, Mapping):
            return np.asarray(lookup(name))
        if name not in lookup:
            known = ", ".join(sorted(lookup))
            raise ProblemsError(Problem(self.where, f'"{name}" is not known', known, nearest(name, lookup)))
        return np.asarray(lookup[name])

    def _misfit(self, name: str, use: str, value: np.ndarray) -> Problem | None:
        is_now = {"b": "true or false", "U": "text", "O": "text"}.get(value.dtype.kind, "a number")
        needed = {"number": "a number", "condition": "true or false", "text": "text"}[use]
        if is_now == needed:
            return None
        advice = f'compare it, for example "{name} > 0"' if use == "condition" and is_now == "a number" else ""
        return Problem(self.where, f'"{name}" is {is_now} but is used as {needed} in "{self.text}"', needed, advice)


def compile_formula(text: str, where: str, wanted: str | None = None) -> Formula:
    """Compile a formula.

    text    the formula, at most 2000 characters, 400 parts, 60 levels deep
    where   file and key, for messages
    wanted  "number" or "condition" where only that will do; a lone name is taken as that (as a number without `wanted`)

    Raises ProblemsError with everything that is refused in it.

    >>> float(compile_formula("60 * (weight / 70) ** 0.75", "x").evaluate({"weight": np.array(70.0)}))
    60.0
    """
    if not isinstance(text, str):
        raise ProblemsError(Problem(where, f"{text!r:.100}", "a formula, as text in quotes"))
    root = _parse(text, where)
    compiler = _Compiler(where)
    kind = wanted or compiler.kind_of(root) or "number"
    run = compiler.build(root, kind, 1)
    if compiler.problems:
        raise ProblemsError(compiler.problems)
    uses = frozenset(compiler.uses)
    return Formula(text, where, frozenset(name for name, _ in uses), kind, uses, run)


def _parse(text: str, where: str) -> ast.expr:
    """The syntax tree, after the checks that need no look inside."""

    def refused(found: str, allowed: str, advice: str = "") -> ProblemsError:
        return ProblemsError(Problem(where, found, allowed, advice))

    if len(text) > LONGEST_TEXT:
        raise refused(f"a formula of {len(text)} characters", f"at most {LONGEST_TEXT}")
    strange = re.search(r"[^\t\n\r -~]|[#\\]", text)
    if strange:
        raise refused(f"the character {strange[0]!r} in a formula", "plain ASCII letters, digits and signs")
    if not text.strip():
        raise refused("an empty formula", _LANGUAGE)
    if re.search(r"\b[0-9]+_|\b0[xob]", text, re.IGNORECASE):
        raise refused(f'"{text[:200]}" holds a number in an unusual form', "plain decimal numbers")
    try:
        root = ast.parse(" ".join(text.split()), mode="eval").body
    except (SyntaxError, ValueError, MemoryError, RecursionError) as error:
        reason = error.msg if isinstance(error, SyntaxError) else "nested too deeply"
        unit = re.search(r"[0-9.] *[A-Za-z]", text)
        advice = "a formula holds no units; multiply with *, as in 0.5 * weight" if unit else ""
        raise refused(f'"{text[:200]}" cannot be read: {reason}', _LANGUAGE, advice) from None
    parts = sum(1 for _ in ast.walk(root))
    if parts > MOST_PARTS:
        raise refused(f"a formula of {parts} parts", f"at most {MOST_PARTS}")
    return root


class _Compiler:
    """Turns a syntax tree into nested calls, noting names and their uses, and everything that is refused."""

    def __init__(self, where: str):
        self.where = where
        self.problems: list[Problem] = []
        self.uses: set[tuple[str, str]] = set()

    def refuse(self, node: ast.expr, why: str, allowed: str = _LANGUAGE, advice: str = "") -> Run:
        try:
            shown = ast.unparse(node)
        except (ValueError, RecursionError):
            shown = "this part"
        self.problems.append(Problem(self.where, f'"{shown[:100]}" {why}', allowed, advice))
        return lambda values: np.float64(np.nan)

    def kind_of(self, node: ast.expr) -> str | None:
        """What the node gives, as far as its form tells: a lone name gives None."""
        if isinstance(node, (ast.Compare, ast.BoolOp)):
            return "condition"
        if isinstance(node, ast.UnaryOp):
            return "condition" if isinstance(node.op, ast.Not) else "number"
        if isinstance(node, ast.IfExp):
            return self.kind_of(node.body) or self.kind_of(node.orelse)
        if isinstance(node, ast.Name):
            return "condition" if node.id in _CONSTANTS else None
        return "number"

    def build(self, node: ast.expr, wanted: str, depth: int) -> Run:
        """The call that evaluates the node, which must give what is wanted: "number" or "condition"."""
        if depth > DEEPEST:
            return self.refuse(node, "lies too deep", f"at most {DEEPEST} levels")
        kind = self.kind_of(node)
        builder = getattr(self, f"_build_{type(node).__name__}", None)
        if builder is None:
            advice = "write a decimal point, not a comma" if isinstance(node, ast.Tuple) else ""
            return self.refuse(node, "is not part of the formula language", advice=advice)
        if kind not in (None, wanted):
            other = {"number": "a number", "condition": "a condition"}
            return self.refuse(node, f"is {other[kind]} where {other[wanted]} is needed", other[wanted])
        return builder(node, wanted, depth + 1)

    def _build_Constant(self, node: ast.Constant, wanted: str, depth: int) -> Run:
        value = node.value
        if isinstance(value, bool):
            return self.refuse(node, "is not part of the formula language", advice=f'write "{str(value).lower()}"')
        if isinstance(value, str):
            return self.refuse(node, "is text out of place", 'text only as in sex == "female"')
        if not isinstance(value, (int, float)):
            return self.refuse(node, "is no number")
        if not abs(value) <= LARGEST_NUMBER:
            return self.refuse(node, "is too large", f"numbers up to {LARGEST_NUMBER:g}")
        number = np.float64(value)
        return lambda values: number

    def _build_Name(self, node: ast.Name, wanted: str, depth: int) -> Run:
        name = node.id
        if name in _CONSTANTS:
            return lambda values: _CONSTANTS[name]
        if name in FUNCTIONS:
            return self.refuse(node, "is a function without its arguments", f"{name}(...)")
        if name == "sex":
            return self.refuse(node, "can only be compared", 'sex == "female" or sex == "male"')
        if name.startswith("_"):
            return self.refuse(node, "is no name", "names that start with a letter")
        self.uses.add((name, wanted))
        return lambda values: values[name]

    def _build_BinOp(self, node: ast.BinOp, wanted: str, depth: int) -> Run:
        function = _ARITHMETIC.get(type(node.op))
        if function is None:
            advice = "write ** for a power" if isinstance(node.op, ast.BitXor) else ""
            return self.refuse(node, "uses an operator that is not part of the formula language", "+ - * / **", advice)
        if isinstance(node.op, ast.Pow):
            self._check_exponent(node.right)
        left, right = self.build(node.left, "number", depth), self.build(node.right, "number", depth)
        return lambda values: function(left(values), right(values))

    def _check_exponent(self, node: ast.expr) -> None:
        number = node.operand if isinstance(node, ast.UnaryOp) else node
        value = number.value if isinstance(number, ast.Constant) else None
        if isinstance(value, (int, float)) and abs(value) > LARGEST_EXPONENT:
            self.refuse(node, "is too large an exponent", f"exponents from -{LARGEST_EXPONENT} to {LARGEST_EXPONENT}")

    def _build_UnaryOp(self, node: ast.UnaryOp, wanted: str, depth: int) -> Run:
        if isinstance(node.op, ast.Not):
            inner = self.build(node.operand, "condition", depth)
            return lambda values: np.logical_not(inner(values))
        if not isinstance(node.op, ast.USub):
            return self.refuse(node, "uses a sign that is not part of the formula language", "-")
        inner = self.build(node.operand, "number", depth)
        return lambda values: np.negative(inner(values))

    def _build_BoolOp(self, node: ast.BoolOp, wanted: str, depth: int) -> Run:
        joined = np.logical_and if isinstance(node.op, ast.And) else np.logical_or
        parts = [self.build(part, "condition", depth) for part in node.values]
        return lambda values: reduce(joined, [part(values) for part in parts])

    def _build_IfExp(self, node: ast.IfExp, wanted: str, depth: int) -> Run:
        test = self.build(node.test, "condition", depth)
        body, orelse = self.build(node.body, wanted, depth), self.build(node.orelse, wanted, depth)
        return lambda values: np.where(test(values), body(values), orelse(values))

    def _build_Compare(self, node: ast.Compare, wanted: str, depth: int) -> Run:
        sides = [node.left, *node.comparators]
        if any(isinstance(op, (ast.Is, ast.IsNot, ast.In, ast.NotIn)) for op in node.ops):
            return self.refuse(node, "uses a comparison that is not part of the formula language", "< <= > >= == !=")
        if any(isinstance(side, ast.Name) and side.id == "sex" for side in sides) or any(
            isinstance(side, ast.Constant) and isinstance(side.value, str) for side in sides
        ):
            return self._build_text_comparison(node, sides)
        equality = all(isinstance(op, (ast.Eq, ast.NotEq)) for op in node.ops)
        conditions = equality and any(self.kind_of(side) == "condition" for side in sides)
        runs = [self.build(side, "condition" if conditions else "number", depth) for side in sides]
        compare = [_COMPARISONS[type(op)] for op in node.ops]

        def run(values: dict[str, np.ndarray]) -> np.ndarray:
            results = [side(values) for side in runs]
            return reduce(np.logical_and, [op(a, b) for op, a, b in zip(compare, results, results[1:])])

        return run

    def _build_text_comparison(self, node: ast.Compare, sides: list[ast.expr]) -> Run:
        names = [side.id for side in sides if isinstance(side, ast.Name)]
        texts = [side.value for side in sides if isinstance(side, ast.Constant)]
        if len(sides) != 2 or names != ["sex"] or len(texts) != 1 or not isinstance(node.ops[0], (ast.Eq, ast.NotEq)):
            return self.refuse(node, "compares text with something else", 'sex == "female", sex != "male" and the like')
        if texts[0] not in _SEXES:
            advice = nearest(str(texts[0]).lower(), _SEXES)
            return self.refuse(node, f"compares sex with {texts[0]!r}", '"female" or "male"', advice)
        self.uses.add(("sex", "text"))
        compare, text = _COMPARISONS[type(node.ops[0])], texts[0]
        return lambda values: compare(values["sex"], text)

    def _build_Call(self, node: ast.Call, wanted: str, depth: int) -> Run:
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        if name not in FUNCTIONS:
            return self.refuse(node, "calls an unknown function", " ".join(FUNCTIONS), nearest(name, FUNCTIONS))
        function, fewest, most = FUNCTIONS[name]
        if node.keywords or not fewest <= len(node.args) <= most:
            count = str(fewest) if fewest == most else f"{fewest} to {most}"
            return self.refuse(node, "has the wrong arguments", f"{name} with {count} plain arguments")
        if name == "power":
            self._check_exponent(node.args[1])
        parts = [self.build(part, "number", depth) for part in node.args]
        return lambda values: function(*[part(values) for part in parts])
