"""Formulas from text to trees.

Python's own parser turns the text into a syntax tree; what is on the white list is copied into a
tree of `roa.loop.expression`, everything else is a fault with its column. Nothing is ever evaluated
as Python. The caps keep every later walk over the tree short: filters on the text alone fail both ways.
"""

from __future__ import annotations

import ast
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation

from roa.loop.expression import FUNCTIONS, Binary, Call, Compare, Expression, Lookup, Name, Negate, Number, Power
from roa.loop.formula_syntax import ACCEPTED, FormulaError, FormulaFault, syntax_tree
from roa.loop.lookup_table import LookupTable
from roa.loop.wording import hint, listed, shortened

LARGEST_EXPONENT = 16
LARGEST_NUMBER = Decimal("1e300")  # products of a few such numbers still have a float
SMALLEST_NUMBER = Decimal("1e-300")

_OPERATORS: dict[type[ast.operator], str] = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.Div: "/"}
_COMPARISONS: dict[type[ast.cmpop], str] = {ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">="}
_REFUSED: dict[type[ast.AST], str] = {
    ast.Attribute: "attributes (a dot after a name) are not part of formulas",
    ast.Subscript: "square brackets are not part of formulas",
    ast.IfExp: "if … else is not part of formulas; write where(condition, a, b)",
    ast.BoolOp: "and / or are not part of formulas; put one where(…) inside another",
    ast.Lambda: "lambda is not part of formulas",
    ast.NamedExpr: ":= is not part of formulas; make it a signal",
    ast.Tuple: "a comma may only separate the arguments of a function",
    ast.List: "lists are not part of formulas",
    ast.JoinedStr: "text is not part of formulas",
    ast.Starred: "a star before an argument is not part of formulas",
}
_PLACEHOLDER = Number(Decimal(0))  # stands for a faulty part while the rest is read


@dataclass(frozen=True)
class Vocabulary:
    """The names that a formula may use, and why it may not use others.

    Attributes
    ----------
    names : states, parameters and signals that may be used
    constants : exact value of each parameter, for exponents
    refused : further known names, each with the sentence that says why not here
    tables : look-up tables by name, for the first argument of lookup
    """

    names: Collection[str]
    constants: Mapping[str, Decimal] = field(default_factory=dict)
    refused: Mapping[str, str] = field(default_factory=dict)
    tables: Mapping[str, LookupTable] = field(default_factory=dict)


def parse(text: str, vocabulary: Vocabulary) -> Expression:
    """Turn the text of a formula into its tree.

    Raises
    ------
    FormulaError
        With all faults, where the text is not a formula in the given names or exceeds a cap.
    """
    body = syntax_tree(text)
    reader = _Reader(text, vocabulary)
    tree = reader.expression(body)
    if reader.faults:
        raise FormulaError(reader.faults)
    return tree


class _Reader:
    """Copies a syntax tree of a capped depth into an expression, gathering faults on the way."""

    def __init__(self, text: str, vocabulary: Vocabulary) -> None:
        self.text = text
        self.vocabulary = vocabulary
        self.faults: list[FormulaFault] = []

    def fault(self, node: ast.expr | ast.keyword, sentence: str) -> Expression:
        self.faults.append(FormulaFault(node.col_offset + 1, sentence))
        return _PLACEHOLDER

    def source(self, node: ast.expr) -> str:
        return self.text[node.col_offset : node.end_col_offset]

    def expression(self, node: ast.expr) -> Expression:
        match node:
            case ast.Constant():
                return self.number(node)
            case ast.Name(identifier):
                return self.name(node, identifier)
            case ast.UnaryOp(ast.USub(), operand):
                return Negate(self.expression(operand))
            case ast.UnaryOp(ast.UAdd(), operand):
                return self.expression(operand)
            case ast.BinOp(base, ast.Pow(), exponent):
                return self.power(base, exponent)
            case ast.BinOp(left, operator, right):
                return self.binary(node, left, operator, right)
            case ast.Call():
                return self.call(node)
            case ast.Compare():
                return self.fault(node, "a comparison may stand only as the first argument of where(…)")
        return self.fault(node, _REFUSED.get(type(node), f'"{shortened(self.source(node))}" is refused; {ACCEPTED}'))

    def number(self, node: ast.Constant) -> Expression:
        source = self.source(node)
        if isinstance(node.value, bool) or not isinstance(node.value, int | float):
            kind = "imaginary numbers are" if isinstance(node.value, complex) else f"{shortened(source)} is"
            return self.fault(node, f"{kind} not part of formulas; {ACCEPTED}")
        try:
            value = Decimal(source)
        except InvalidOperation:
            return self.fault(node, f"cannot read the number {shortened(source)}; write it in decimals")
        if value and not SMALLEST_NUMBER <= abs(value) <= LARGEST_NUMBER:
            return self.fault(
                node, f"the number {shortened(source)} is out of range; accepted are 0 and 1e-300 to 1e300"
            )
        return Number(value)

    def name(self, node: ast.expr, identifier: str) -> Expression:
        vocabulary = self.vocabulary
        if identifier in vocabulary.names:
            return Name(identifier)
        if identifier in vocabulary.refused:
            return self.fault(node, vocabulary.refused[identifier])
        if identifier in FUNCTIONS or identifier == "lookup":
            return self.fault(node, f"{identifier} is a function and needs its arguments in brackets")
        if identifier in vocabulary.tables:
            return self.fault(node, f'"{identifier}" is a look-up table; write lookup({identifier}, …)')
        if identifier == "pi":
            return self.fault(node, 'unknown name "pi"; write 3.141592653589793 or make it a parameter')
        return self.fault(node, f'unknown name "{shortened(identifier, 60)}"{hint(identifier, vocabulary.names)}')

    def power(self, base: ast.expr, exponent: ast.expr) -> Expression:
        value = self.constant(exponent)
        if value is None:
            self.fault(exponent, "the exponent must be a number or the name of a parameter")
            value = Decimal(1)
        elif abs(value) > LARGEST_EXPONENT:
            accepted = f"-{LARGEST_EXPONENT} to {LARGEST_EXPONENT}"
            self.fault(exponent, f"the exponent {value} is out of range; accepted are {accepted}")
        return Power(self.expression(base), value)

    def constant(self, node: ast.expr) -> Decimal | None:
        match node:
            case ast.UnaryOp(ast.USub(), operand):
                value = self.constant(operand)
                return None if value is None else -value
            case ast.UnaryOp(ast.UAdd(), operand):
                return self.constant(operand)
            case ast.Name(identifier):
                return self.vocabulary.constants.get(identifier)
            case ast.Constant():
                number = self.number(node)
                return number.value if isinstance(number, Number) else None
        return None

    def binary(self, node: ast.expr, left: ast.expr, operator: ast.operator, right: ast.expr) -> Expression:
        operands = self.expression(left), self.expression(right)
        if type(operator) in _OPERATORS:
            return Binary(_OPERATORS[type(operator)], *operands)
        between = self.text[left.end_col_offset : right.col_offset]
        symbol = between.strip(" ()\n\r\t")
        cure = "write ** for a power" if isinstance(operator, ast.BitXor) else ACCEPTED
        column = (left.end_col_offset or 0) + between.find(symbol) + 1
        self.faults.append(FormulaFault(column, f'the operator "{symbol}" is not part of formulas; {cure}'))
        return _PLACEHOLDER

    def call(self, node: ast.Call) -> Expression:
        if type(node.func) in _REFUSED:
            return self.expression(node.func)
        if not isinstance(node.func, ast.Name):
            self.fault(node.func, f'"{shortened(self.source(node.func))}" is not a function; a product needs *')
        function = node.func.id if isinstance(node.func, ast.Name) else ""
        if function == "lookup":
            return self.lookup(node)
        arguments = tuple(
            self.comparison(argument) if function == "where" and i == 0 else self.expression(argument)
            for i, argument in enumerate(node.args)
        )
        if not function:
            return _PLACEHOLDER
        if node.keywords:
            return self.fault(node.keywords[0], "arguments have no names in formulas")
        if function not in FUNCTIONS:
            return self.unknown_function(node.func, function)
        return self.counted(node, function, arguments)

    def unknown_function(self, node: ast.expr, function: str) -> Expression:
        if function in self.vocabulary.names or function in self.vocabulary.refused:
            return self.fault(node, f'"{function}" is not a function; a product needs *')
        return self.fault(node, f'unknown function "{shortened(function, 60)}"{hint(function, (*FUNCTIONS, "lookup"))}')

    def lookup(self, node: ast.Call) -> Expression:
        table = node.args[0] if node.args else None
        trees = [self.expression(argument) for argument in node.args[1:]]
        if node.keywords:
            return self.fault(node.keywords[0], "arguments have no names in formulas")
        if len(trees) != 1 or not isinstance(table, ast.Name):
            return self.fault(node, "lookup takes the name of a table and one argument: lookup(table, x)")
        known = self.vocabulary.tables
        if table.id not in known:
            tables = f"tables are {listed(known)}" if known else "the configuration has no table [tables.…]"
            named = f'no look-up table is called "{shortened(table.id, 60)}"'
            return self.fault(table, f"{named}; {tables}{hint(table.id, known)}")
        return Lookup(known[table.id], trees[0])

    def counted(self, node: ast.expr, function: str, arguments: tuple[Expression, ...]) -> Expression:
        expected, found = FUNCTIONS[function], len(arguments)
        if function in ("min", "max") and found >= expected:
            return _pairs(function, arguments)
        if found != expected:
            more = " or more" if function in ("min", "max") else ""
            plural = "" if expected == 1 else "s"
            return self.fault(node, f"{function} takes {expected}{more} argument{plural}, {found} found")
        return Call(function, arguments)

    def comparison(self, node: ast.expr) -> Expression:
        if not isinstance(node, ast.Compare):
            self.expression(node)
            return self.fault(node, "the first argument of where must be a comparison such as x < 0")
        operands = [self.expression(operand) for operand in (node.left, *node.comparators)]
        if len(operands) > 2:
            return self.fault(node, "comparisons cannot be chained; put one where(…) inside another")
        if type(node.ops[0]) not in _COMPARISONS:
            return self.fault(node, "accepted comparisons are < <= > >=")
        return Compare(_COMPARISONS[type(node.ops[0])], *operands)


def _pairs(function: str, arguments: tuple[Expression, ...]) -> Expression:
    """Nest min or max of many arguments as a balanced tree, which is only log2 as deep as they are many."""
    if len(arguments) == 1:
        return arguments[0]
    middle = (len(arguments) + 1) // 2
    return Call(function, (_pairs(function, arguments[:middle]), _pairs(function, arguments[middle:])))
