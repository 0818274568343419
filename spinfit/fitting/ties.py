"""Ties: a parameter that follows from others by arithmetic on their names.

``"cu.g_y" = "cu.g_x"``, ``"t.E" = "t.D / 3"``.  The text is never executed: it is cut into numbers,
names and ``+ - * / ** ( )`` here and nothing else is understood.  Numbers are in the unit in which
the job gave the parameters.  Values and exact partial derivatives come from the same tree.

The components of a traceless tensor add up to 0, so that varying some of them moves the others;
`compile_ties` adds those ties by itself.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from spinfit.errors import InputError
from spinfit.fitting.parameters import Parameter, members, unknown

LONGEST = 1000
"""Characters of a tie: nobody writes more by hand."""
DEEPEST = 40
"""Nested brackets and signs: well inside Python's own limit of recursion."""
HIGHEST_POWER = 12.0

ARITHMETIC = "write arithmetic (+ - * / ** and brackets) on parameter names and numbers"

_NUMBER = re.compile(r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
# Parts of a name may begin with a digit (cu.63Cu.A_z), so a name can look like the start of a
# number and the other way round: the longer one is meant, and of equal ones the number.
_NAME = re.compile(r"[A-Za-z0-9_]+(?:\.[A-Za-z0-9_]+)+|[A-Za-z_][A-Za-z0-9_]*", re.ASCII)
_OPERATOR = re.compile(r"\*\*|[-+*/()]")


@dataclass(frozen=True)
class Node:
    """A tie's tree: a number, a name, or an operator on the nodes in `of`.

    `what` is "number", "name", "+", "-", "*", "/", "**" (two nodes) or "neg" (one).
    """

    what: Literal["number", "name", "+", "-", "*", "/", "**", "neg"]
    number: float = 0.0
    name: str = ""
    of: tuple[Node, ...] = ()


def _tokens(text: str) -> list[tuple[str, str]]:
    """Cut a text into ("number" | "name" | "operator", text)."""
    found = []
    at = 0
    while at < len(text):
        if text[at].isspace():
            at += 1
            continue
        number, name, operator = (rule.match(text, at) for rule in (_NUMBER, _NAME, _OPERATOR))
        ends = {"number": number, "name": name, "operator": operator}
        kind = max(ends, key=lambda k: -1 if ends[k] is None else ends[k].end())
        match = ends[kind]
        if match is None:
            raise InputError(f'"{text[at]}" at character {at + 1} of "{_shown(text)}"', ARITHMETIC)
        found.append((kind, match.group()))
        at = match.end()
    return found


def _shown(text: str) -> str:
    """Return a tie for a message: the beginning of a long one."""
    return text if len(text) <= 60 else text[:57] + "..."


class _Parser:
    """Recursive descent with Python's precedence: + and -, * and /, signs, ** to the right."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.tokens = _tokens(text)
        self.at = 0
        self.depth = 0

    def peek(self) -> str:
        kind, text = self.tokens[self.at] if self.at < len(self.tokens) else ("end", "")
        return text if kind == "operator" else ""

    def whole(self) -> Node:
        node = self.sum()
        if self.at < len(self.tokens):
            raise self.wrong(f'"{_shown(self.tokens[self.at][1])}" cannot stand there in "{_shown(self.text)}"')
        return node

    def wrong(self, found: str) -> InputError:
        return InputError(found, ARITHMETIC)

    def sum(self) -> Node:
        node = self.product()
        while (operator := self.peek()) in ("+", "-"):
            self.at += 1
            node = Node(operator, of=(node, self.product()))
        return node

    def product(self) -> Node:
        node = self.signed()
        while (operator := self.peek()) in ("*", "/"):
            self.at += 1
            node = Node(operator, of=(node, self.signed()))
        return node

    def signed(self) -> Node:
        self.depth += 1
        if self.depth > DEEPEST:
            raise InputError(f'"{self.text[:40]}..." is nested more than {DEEPEST} deep', "write it more simply")
        sign = self.peek()
        if sign in ("+", "-"):
            self.at += 1
            node = self.signed()
            node = Node("neg", of=(node,)) if sign == "-" else node
        else:
            node = self.power()
        self.depth -= 1
        return node

    def power(self) -> Node:
        node = self.atom()
        if self.peek() == "**":
            self.at += 1
            exponent = self.signed()
            if names_in(exponent):
                raise InputError(f'a parameter in the exponent of "{_shown(self.text)}"', "write a number there")
            value = evaluate(exponent, {})
            if abs(value) > HIGHEST_POWER:
                raise InputError(f'the power {value:g} in "{_shown(self.text)}"', f"powers go up to {HIGHEST_POWER:g}")
            node = Node("**", of=(node, Node("number", value)))
        return node

    def atom(self) -> Node:
        if self.at >= len(self.tokens):
            raise self.wrong(f'"{_shown(self.text)}" ends too early')
        kind, text = self.tokens[self.at]
        self.at += 1
        if kind == "number":
            return Node("number", float(text))
        if kind == "name":
            if self.peek() == "(":
                raise self.wrong(f'"{_shown(text)}(" calls a function')
            return Node("name", name=text)
        if text != "(":
            raise self.wrong(f'"{_shown(text)}" cannot stand there in "{_shown(self.text)}"')
        node = self.sum()
        if self.peek() != ")":
            raise self.wrong(f'a bracket is not closed in "{_shown(self.text)}"')
        self.at += 1
        return node


def parse_tie(text: str) -> Node:
    """Read arithmetic on names.

    Raises
    ------
    InputError
        For anything else: calls, attributes, indices, texts, functions, names in an exponent, a
        power beyond 12, more than 1000 characters or 40 nested brackets.
    """
    if not isinstance(text, str):
        raise InputError(f"{text!r:.40} is not a text", ARITHMETIC)
    if len(text) > LONGEST:
        raise InputError(f"{len(text)} characters", f"write at most {LONGEST}")
    node = _Parser(" ".join(text.split())).whole()
    _check_constants(node)
    return node


def _check_constants(root: Node) -> None:
    """Refuse parts without names that have no value: ``1 / 0``, ``1e999``."""
    if not names_in(root):
        evaluate(root, {})
        return
    # A sum of 500 terms is a tree 500 deep to the left: walked with a list, not by recursion.
    waiting = [root]
    while waiting:
        node = waiting.pop()
        if node.what == "number" and not math.isfinite(node.number):
            raise InputError("a number too large to be kept", "write a smaller one")
        waiting.extend(node.of)


def names_in(root: Node) -> tuple[str, ...]:
    """Return the names in a tree, each once, from left to right."""
    found: dict[str, None] = {}
    waiting = [root]
    while waiting:
        node = waiting.pop()
        if node.what == "name":
            found[node.name] = None
        waiting.extend(reversed(node.of))
    return tuple(found)


def _postorder(root: Node) -> list[Node]:
    """Return the nodes of a tree, children before parents, left before right."""
    order, waiting = [], [root]
    while waiting:
        node = waiting.pop()
        order.append(node)
        waiting.extend(node.of)
    return order[::-1]


def _combine(what: str, values: Sequence[float]) -> tuple[float, tuple[float, ...]]:
    """Return the value of an operator and its derivative by each operand."""
    a = values[0]
    if what == "neg":
        return -a, (-1.0,)
    b = values[1]
    if what == "+":
        return a + b, (1.0, 1.0)
    if what == "-":
        return a - b, (1.0, -1.0)
    if what == "*":
        return a * b, (b, a)
    if what == "/":
        return a / b, (1 / b, -a / b / b)
    value = a**b
    if isinstance(value, complex):
        raise ValueError("root of a negative number")
    slope = 0.0 if b == 0 else (1.0 if b == 1 else b * a ** (b - 1) if a != 0 or b > 1 else math.inf)
    return value, (slope, 0.0)


def _run(root: Node, values: Mapping[str, float], with_slopes: bool) -> tuple[float, dict[str, float]]:
    stack: list[tuple[float, dict[str, float]]] = []
    try:
        for node in _postorder(root):
            if node.what == "number":
                stack.append((node.number, {}))
            elif node.what == "name":
                stack.append((values[node.name], {node.name: 1.0} if with_slopes else {}))
            else:
                parts = stack[-len(node.of) :]
                del stack[-len(node.of) :]
                value, slopes = _combine(node.what, [part[0] for part in parts])
                total: dict[str, float] = {}
                for slope, (_, inner) in zip(slopes, parts, strict=True):
                    for name, partial in inner.items():
                        total[name] = total.get(name, 0.0) + slope * partial
                stack.append((value, total))
    except ZeroDivisionError:
        raise InputError("the arithmetic divides by 0", "tie it in another way") from None
    except (OverflowError, ValueError):
        raise InputError("the arithmetic has no real value", "tie it in another way") from None
    value, slopes = stack[0]
    if not math.isfinite(value):
        raise InputError("the arithmetic has no finite value", "tie it in another way")
    return value, slopes


def evaluate(node: Node, values: Mapping[str, float]) -> float:
    """Return the value of a tree for values of its names.

    Raises
    ------
    InputError
        Where it has none: division by 0, root of a negative number, overflow.
    """
    return _run(node, values, False)[0]


def slopes(node: Node, values: Mapping[str, float]) -> dict[str, float]:
    """Return the partial derivative of a tree by each name in it."""
    return _run(node, values, True)[1]


class Ties:
    """Ties in the order in which they can be worked out.

    Attributes
    ----------
    names : tuple of str
        The tied parameters, each after those it depends on.
    trees : dict of name -> Node
        In units of the job.
    """

    def __init__(self, trees: Mapping[str, Node], parameters: Mapping[str, Parameter]) -> None:
        self._parameters = parameters
        self.names = _ordered(trees)
        self.trees = {name: trees[name] for name in self.names}
        self._needs = {name: names_in(tree) for name, tree in self.trees.items()}

    def _arguments(self, name: str, values: Mapping[str, float]) -> dict[str, float]:
        known = self._parameters
        return {n: known[n].to_job(values.get(n, known[n].value)) for n in self._needs[name]}

    def apply(self, values: Mapping[str, float]) -> dict[str, float]:
        """Return the values (internal units) with those of the tied parameters put in.

        What `values` does not mention has its start value.

        Raises
        ------
        InputError
            When a tie has no finite value there.
        """
        result = dict(values)
        for name in self.names:
            try:
                value = evaluate(self.trees[name], self._arguments(name, result))
            except InputError as error:
                raise error.at(place=f"fit.tie.{name}") from None
            result[name] = self._parameters[name].from_job(value)
        return result

    def gradient(self, values: Mapping[str, float]) -> dict[str, dict[str, float]]:
        """Return d(tied)/d(free) for every tied parameter, in internal units.

        Ties to tied parameters are followed by the chain rule, so that the inner names are free
        (varied or fixed) parameters only.
        """
        values = self.apply(values)
        result: dict[str, dict[str, float]] = {}
        for name in self.names:
            total: dict[str, float] = {}
            for inner, slope in slopes(self.trees[name], self._arguments(name, values)).items():
                # Units are factors: to_job(1) is the factor of the inner name, from_job(1) of the tied one.
                slope = slope * self._parameters[inner].to_job(1.0) * self._parameters[name].from_job(1.0)
                for free, partial in result.get(inner, {inner: 1.0}).items():
                    total[free] = total.get(free, 0.0) + slope * partial
            result[name] = total
        return result


def _ordered(trees: Mapping[str, Node]) -> tuple[str, ...]:
    """Return the tied names, each after those it needs; a circle is named."""
    needs = {name: [n for n in names_in(tree) if n in trees] for name, tree in trees.items()}
    done: dict[str, None] = {}
    for first in trees:
        chain = [first]
        while chain:
            name = chain[-1]
            left = next((n for n in needs[name] if n not in done), None)
            if left is None:
                done[chain.pop()] = None
            elif left in chain:
                circle = [*chain[chain.index(left) :], left]
                raise InputError(
                    "the ties form a circle: " + " -> ".join(circle), "take one of them out", place=f"fit.tie.{left}"
                )
            else:
                chain.append(left)
    return tuple(done)


def compile_ties(ties: Mapping[str, str], parameters: Mapping[str, Parameter], *, varied: Iterable[str] = ()) -> Ties:
    """Read and check all ties of a job.

    Parameters
    ----------
    ties : mapping of name -> text
        Arithmetic in units of the job.
    parameters : mapping of name -> Parameter
        Of the model.
    varied : iterable of str
        Single names (`expand_vary`): they cannot be tied as well, and when some components of a
        traceless tensor are among them the others are tied to keep the sum 0.

    Raises
    ------
    InputError
        For what is not arithmetic on known names, circles, a parameter both tied and varied, and
        arithmetic that mixes two units of the same kind.
    """
    varied = tuple(varied)
    trees: dict[str, Node] = {}
    for name, text in ties.items():
        place = f"fit.tie.{name}"
        if name not in parameters:
            if any(name in p.groups for p in parameters.values()):
                parts = ", ".join(p.name for p in parameters.values() if name in p.groups)
                raise InputError(f'"{name}" is a group', f"tie its parts: {parts}", place=place)
            raise unknown(name, parameters, place=place)
        if name in varied:
            raise InputError(f'"{name}" is both varied and tied', "take it out of one of the two", place=place)
        try:
            trees[name] = parse_tie(text)
            _check_names(name, trees[name], parameters)
        except InputError as error:
            raise error.at(place=place) from None
    trees.update(_traceless(varied, trees, parameters))
    return Ties(trees, parameters)


def _check_names(name: str, tree: Node, parameters: Mapping[str, Parameter]) -> None:
    units: dict[str, Parameter] = {parameters[name].kind: parameters[name]}
    for other in names_in(tree):
        if other not in parameters:
            raise unknown(other, parameters)
        parameter = parameters[other]
        first = units.setdefault(parameter.kind, parameter)
        if first.from_job(1.0) != parameter.from_job(1.0):
            found = f'"{first.name}" is in {first.unit} and "{other}" in {parameter.unit}'
            raise InputError(found, "give both in the same unit: numbers in a tie are in the units of the job")


def _traceless(
    varied: Sequence[str], trees: Mapping[str, Node], parameters: Mapping[str, Parameter]
) -> dict[str, Node]:
    """Tie the components of traceless tensors that must follow those that move.

    When one follows it takes up the whole change; when two follow each takes half of it, so that
    their difference stays.
    """
    moving = {*varied, *trees}
    groups = dict.fromkeys(parameters[n].groups[0] for n in moving if parameters[n].sum_zero)
    added: dict[str, Node] = {}
    for group in groups:
        names = members(group, parameters)
        leading = moving | _needed_by([n for n in names if n in trees], trees)
        followers = [n for n in names if n not in leading]
        movers = [n for n in names if n in leading]
        # (perpendicular, parallel): the perpendicular value counts twice in the sum.
        weight = {n: 2.0 if n.endswith("_perp") else 1.0 for n in names}
        for name in followers:
            start = parameters[name].to_job(parameters[name].value)
            node = Node("number", start)
            for mover in movers:
                rest = Node("number", parameters[mover].to_job(parameters[mover].value))
                change = Node("-", of=(Node("name", name=mover), rest))
                share = weight[mover] / (weight[name] * len(followers))
                node = Node("-", of=(node, Node("*", of=(Node("number", share), change))))
            added[name] = node
    return added


def _needed_by(tied: Sequence[str], trees: Mapping[str, Node]) -> set[str]:
    """Return every name on which tied parameters depend, through other ties too."""
    found: set[str] = set()
    waiting = list(tied)
    while waiting:
        name = waiting.pop()
        if name not in found:
            found.add(name)
            waiting.extend(names_in(trees[name]) if name in trees else ())
    return found
