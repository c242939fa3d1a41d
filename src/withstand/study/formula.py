"""Model formulas from strangers: parsed and checked against a short list before anything is evaluated.

The notation is Wilkinson & Rogers (1973, Applied Statistics 22:392), as the formula library reads it. That library evaluates
any Python in a formula; what passes here names columns, numbers, operators and a few functions, and nothing else.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Collection
from dataclasses import dataclass, field

from withstand.errors import FormulaError, nearest

FUNCTIONS = ("log", "log2", "log10", "log1p", "exp", "sqrt", "poly", "bs", "cr", "C", "I", "center", "scale")
"""Functions that may stand in a formula."""

_WHERE = "study.model"
_BACKQUOTED = re.compile(r"`([^`]*)`")
_ARITHMETIC = (ast.Add, ast.Sub, ast.Mult, ast.Div)
_LARGEST_POWER = 20
_LARGEST_BASIS = 100
_TERMS = (ast.Add, ast.Sub, ast.Mult, ast.Div, ast.MatMult)


@dataclass(frozen=True)
class Formula:
    """A formula that has passed the checks.

    Parameters
    ----------
    text : str
        As it was written.
    response, predictors : str
        The two sides, ready for the formula library.
    response_columns, columns : tuple of str
        Columns named on each side, in order of appearance.
    coded : tuple of str
        Columns that stand in C() alone: their values are labels on purpose.
    """

    text: str
    response: str
    predictors: str
    response_columns: tuple[str, ...]
    columns: tuple[str, ...]
    coded: tuple[str, ...]


def parse_formula(text: str, known: Collection[str], *, planned: bool = False) -> Formula:
    """Check a formula.

    Parameters
    ----------
    text : str
        Such as "y ~ a + b". A column whose name is no plain word stands in backquotes.
    known : collection of str
        Columns of the table.
    planned : bool
        There is no table yet: the left side is one name and need not be a column.

    Raises
    ------
    FormulaError
        If it is not a formula, names an unknown column, or contains anything but columns, 0 and 1, operators and the
        functions in FUNCTIONS.
    """
    sides = text.split("~")
    if len(sides) != 2 or not sides[0].strip() or not sides[1].strip():
        raise FormulaError(
            f"`{text}` is not of the form response ~ predictors", where=_WHERE, remedy='Write it as in "y ~ a + b".'
        )
    response = _Side(text, sides[0], known)
    if planned:
        name = sides[0].strip().strip("`")
        left: tuple[str, ...] = (name,)
        if not re.fullmatch(r"[^\W\d]\w*", name):
            raise response.refuse(f"the response of a plan is one name, and `{sides[0].strip()}` is more")
    else:
        if not isinstance(response.tree, ast.Name | ast.Call):
            raise response.refuse(
                "the left side is more than a column or a function of it", "Compute inside I(), as in I(y / 2)."
            )
        response.check_value(response.tree)
        left = tuple(dict.fromkeys(response.plain))
        if not left:
            raise response.refuse(f"the left side `{sides[0].strip()}` names no column")
    predictors = _Side(text, sides[1], known)
    predictors.check_term(predictors.tree)
    shared = [name for name in left if name in predictors.plain + predictors.coded]
    if shared:
        raise predictors.refuse(f"the response '{shared[0]}' stands on the right side too", "Take it out there.")
    return Formula(
        text=text,
        response=response.clean,
        predictors=predictors.clean,
        response_columns=left,
        columns=tuple(dict.fromkeys(predictors.order)),
        coded=tuple(dict.fromkeys(name for name in predictors.coded if name not in predictors.plain)),
    )


@dataclass
class _Side:
    """One side of a formula, read as a Python expression that is only looked at."""

    text: str
    written: str
    known: Collection[str]
    plain: list[str] = field(default_factory=list)
    coded: list[str] = field(default_factory=list)
    order: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self._quoted: dict[str, str] = {}
        source = _BACKQUOTED.sub(self._stand_in, self.written.strip())
        if "@" in source:
            raise self.refuse("'@' has no meaning in a formula")
        self.source = source.replace(":", "@").replace("^", "**")
        try:
            self.tree = ast.parse(self.source, mode="eval").body
        except (SyntaxError, ValueError, MemoryError, RecursionError) as error:
            place = getattr(error, "offset", None) or 1
            rest = self.source[place - 1 :].replace("@", ":") or self.written.strip()
            raise self.refuse(f"it cannot be read from `{rest}` on") from error

    def _stand_in(self, match: re.Match[str]) -> str:
        name = f"_column_{len(self._quoted)}_"
        self._quoted[name] = match.group(1)
        return name

    def refuse(self, what: str, remedy: str = "") -> FormulaError:
        return FormulaError(
            f"in `{self.text.strip()}`, {what}",
            where=_WHERE,
            remedy=remedy or f"A formula holds columns, 0 or 1, the operators + - * / : ** and {', '.join(FUNCTIONS)}.",
        )

    @property
    def clean(self) -> str:
        """As the formula library is to read it: ** for powers throughout."""
        return self._written_out(self.source)

    def shown(self, node: ast.AST) -> str:
        """A part as the user wrote it."""
        return self._written_out(ast.get_source_segment(self.source, node) or ast.unparse(node))

    def _written_out(self, text: str) -> str:
        text = text.replace("@", ":")
        for stand_in, name in self._quoted.items():
            text = text.replace(stand_in, f"`{name}`")
        return text

    def check_term(self, node: ast.AST) -> None:
        """Where operators combine terms."""
        match node:
            case ast.BinOp(op=ast.Pow()):
                self._check_crossing(node)
            case ast.BinOp(op=op) if isinstance(op, _TERMS):
                self.check_term(node.left)
                self.check_term(node.right)
            case ast.UnaryOp(op=ast.USub() | ast.UAdd(), operand=ast.Constant()):
                self.check_term(node.operand)
            case ast.Constant(value=value):
                if isinstance(value, bool) or value not in (0, 1):
                    raise self.refuse(f"`{self.shown(node)}` cannot be a term", "A number stands in I(), as in I(2 * x).")
            case _:
                self.check_value(node)

    def _check_crossing(self, node: ast.BinOp) -> None:
        """(a + b)**2 crosses terms; x**2 would mean x, which nobody means."""
        if not isinstance(node.left, ast.BinOp):
            inner = self.shown(node.left)
            raise self.refuse(f"`{inner}**...` means {inner} itself, not a power of it", f"Write I({inner}**2) for the square.")
        if not (isinstance(node.right, ast.Constant) and type(node.right.value) is int and 1 <= node.right.value <= 9):
            raise self.refuse(f"`{self.shown(node)}` needs a whole number from 1 to 9 behind **")
        self.check_term(node.left)

    def check_value(self, node: ast.AST, coded: bool = False) -> None:
        """Where operators compute."""
        match node:
            case ast.Name(id=name):
                self._check_column(self._quoted.get(name, name), coded)
            case ast.Constant(value=int() | float()) if not isinstance(node.value, bool):
                pass
            case ast.BinOp(op=ast.Pow()):
                self._check_power(node)
            case ast.BinOp(op=op) if isinstance(op, _ARITHMETIC):
                self.check_value(node.left)
                self.check_value(node.right)
            case ast.UnaryOp(op=ast.USub() | ast.UAdd()):
                self.check_value(node.operand)
            case ast.Call():
                self._check_call(node)
            case ast.Attribute():
                raise self.refuse(f"`{self.shown(node)}` reaches for an attribute, which is not evaluated")
            case ast.Subscript():
                raise self.refuse(f"`{self.shown(node)}` looks something up by an index, which is not evaluated")
            case _:
                raise self.refuse(f"`{self.shown(node)}` is not evaluated")

    def _check_power(self, node: ast.BinOp) -> None:
        """Powers of columns alone: a tower of numbers could be made to take for ever."""
        exponent = _number(node.right.operand if isinstance(node.right, ast.UnaryOp) else node.right)
        if exponent is None:
            raise self.refuse(f"the exponent of `{self.shown(node)}` is no number")
        if exponent > _LARGEST_POWER:
            raise self.refuse(f"the exponent of `{self.shown(node)}` is beyond {_LARGEST_POWER}")
        if not any(isinstance(part, ast.Name) for part in ast.walk(node.left)):
            raise self.refuse(f"`{self.shown(node)}` is a power of a number, not of a column", "Write the number out.")
        self.check_value(node.left)

    def _check_call(self, node: ast.Call) -> None:
        if not isinstance(node.func, ast.Name) or node.func.id not in FUNCTIONS:
            name = self.shown(node.func)
            raise self.refuse(f"`{name}(...)` calls a function that is not allowed", nearest(name, FUNCTIONS))
        if not node.args:
            raise self.refuse(f"`{self.shown(node)}` names no column")
        if node.func.id == "C" and (len(node.args) > 1 or node.keywords or not isinstance(node.args[0], ast.Name)):
            raise self.refuse(
                f"`{self.shown(node)}` holds more than a column", "Write C(column); contrasts are chosen in the focus."
            )
        for argument in node.args:
            self.check_value(argument, coded=node.func.id == "C")
        sizes = [*node.args, *(keyword.value for keyword in node.keywords if keyword.arg in ("df", "degree"))]
        for part in sizes if node.func.id in ("poly", "bs", "cr") else ():
            if (_number(part) or 0) > _LARGEST_BASIS:
                raise self.refuse(f"`{self.shown(node)}` asks for {_number(part)}, beyond {_LARGEST_BASIS}")
        for keyword in node.keywords:
            if not self._constant(keyword.value):
                raise self.refuse(f"`{self.shown(keyword.value)}` is no number", "Options of a function are numbers.")

    def _constant(self, node: ast.AST) -> bool:
        match node:
            case ast.Constant(value=int() | float()):  # True and False are numbers here
                return True
            case ast.UnaryOp(op=ast.USub()):
                return self._constant(node.operand)
            case ast.List(elts=parts) | ast.Tuple(elts=parts):
                return all(self._constant(part) for part in parts)
        return False

    def _check_column(self, name: str, coded: bool) -> None:
        if name not in self.known:
            raise self.refuse(f"there is no column '{name}'", nearest(name, self.known))
        self.order.append(name)
        (self.coded if coded else self.plain).append(name)


def _number(node: ast.AST) -> int | float | None:
    if isinstance(node, ast.Constant) and isinstance(node.value, int | float) and not isinstance(node.value, bool):
        return node.value
    return None
