"""Smallest decision trees over the latch and the buttons, so that modes that act alike share their code."""

from collections.abc import Callable, Hashable, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Generic, TypeVar

V = TypeVar("V", bound=Hashable)

#: A question of a tree: a button's index, or `LATCH`.
LATCH = -1


@dataclass(frozen=True, slots=True)
class Leaf(Generic[V]):
    """An answer; ``value`` None stands for "any answer will do"."""

    value: V | None


@dataclass(frozen=True, slots=True)
class Node(Generic[V]):
    """A question with its two sides: `yes` where the button is pressed or the latch is set."""

    ask: int
    yes: "Tree[V]"
    no: "Tree[V]"


Tree = Leaf[V] | Node[V]


def grow(table: Sequence[V | None], asks: Sequence[int]) -> Tree[V]:
    """Return a tree with the fewest questions that answers as *table* does.

    Args:
        table: ``2**len(asks)`` answers; bit i of the index is the answer to ``asks[i]``; None = don't care.
        asks: the questions, those to ask first at the front where it makes no difference.

    Source: dynamic programming over all sub-cubes of the table; exact, for up to nine questions.
    """
    return _smallest(tuple(table), tuple(asks))[1]


@cache
def _smallest(table: tuple[Hashable, ...], asks: tuple[int, ...]) -> tuple[int, Tree]:  # type: ignore[type-arg]
    answers = {value for value in table if value is not None}
    if len(answers) <= 1:
        return 0, Leaf(next(iter(answers), None))
    return min((_split(table, asks, i) for i in range(len(asks))), key=lambda found: found[0])


def _split(table: tuple[Hashable, ...], asks: tuple[int, ...], i: int) -> tuple[int, Tree]:  # type: ignore[type-arg]
    rest = asks[:i] + asks[i + 1 :]
    no, yes = (
        _smallest(tuple(v for k, v in enumerate(table) if (k >> i & 1) == side), rest) for side in (0, 1)
    )
    return 1 + no[0] + yes[0], Node(asks[i], yes[1], no[1])


def leaves(tree: Tree[V]) -> list[V]:
    """Return the answers of a tree from left to right, without the don't-cares, repeats included."""
    if isinstance(tree, Leaf):
        return [] if tree.value is None else [tree.value]
    return leaves(tree.yes) + leaves(tree.no)


@dataclass(frozen=True, slots=True)
class Syntax:
    """How a language writes ``if``: the lines that open, go on and close, and one indentation."""

    first: tuple[str, str]  # around the condition
    other: tuple[str, str]
    otherwise: str
    close: str
    nothing: str  # closes a chain that ends without an else, where the style rules want one
    indent: str = "    "


def render(
    tree: Tree[V], ask: Callable[[int], tuple[str, str]], act: Callable[[V], list[str]], syntax: Syntax
) -> list[str]:
    """Return the tree as lines of an ``if`` chain.

    Args:
        ask: the conditions "yes" and "no" as text, for a question.
        act: the lines for an answer; none for "nothing to do".
    """
    if isinstance(tree, Leaf):
        return [] if tree.value is None else act(tree.value)
    yes, no = (render(side, ask, act, syntax) for side in (tree.yes, tree.no))
    positive, negative = ask(tree.ask)
    shared = _shared_end(yes, no, syntax)
    if shared:
        yes, no = yes[: len(yes) - len(shared)], no[: len(no) - len(shared)]
    if not yes and not no:
        return shared
    return [*choose(tree, positive, negative, yes, no, syntax), *shared]


def choose(
    tree: Node[V], positive: str, negative: str, yes: list[str], no: list[str], syntax: Syntax
) -> list[str]:
    """Return the lines for both sides of a node, either of which may have none."""
    if not yes:
        return branch(negative, no, [], syntax)
    if not no:
        return branch(positive, yes, [], syntax)
    if _bare(tree.no) and not _bare(tree.yes):
        return branch(negative, no, yes, syntax)
    return branch(positive, yes, no, syntax)


def _shared_end(yes: list[str], no: list[str], syntax: Syntax) -> list[str]:
    """Return the plain statements with which both sides end."""
    count = 0
    for a, b in zip(reversed(yes), reversed(no), strict=False):
        if a != b or a.startswith((syntax.indent, syntax.first[0], "}", "el")):
            break
        count += 1
    return yes[len(yes) - count :]


def _bare(tree: Tree[V]) -> bool:
    return isinstance(tree, Leaf)


def branch(condition: str, then: list[str], other: list[str], syntax: Syntax) -> list[str]:
    """Return an if with its else; an else that is itself one whole if becomes an else-if."""
    lines = [condition.join(syntax.first), *_inside(then, syntax)]
    if other and _is_chain(other, syntax):
        head = other[0].removeprefix(syntax.first[0]).removesuffix(syntax.first[1])
        return [*lines, head.join(syntax.other), *_ended(other[1:], syntax)]
    if other:
        lines += [syntax.otherwise, *_inside(other, syntax)]
    return [*lines, *([syntax.close] if syntax.close else [])]


def _is_chain(lines: list[str], syntax: Syntax) -> bool:
    """Whether the lines are exactly one if statement with whatever hangs on it."""
    cont = (syntax.indent, syntax.otherwise, syntax.other[0], syntax.close or "\0")
    return lines[0].startswith(syntax.first[0]) and all(line.startswith(cont) for line in lines[1:])


def _ended(chain: list[str], syntax: Syntax) -> list[str]:
    if not syntax.nothing or syntax.otherwise in chain:
        return chain
    return [*chain[:-1], syntax.otherwise, syntax.indent + syntax.nothing, syntax.close]


def _inside(lines: list[str], syntax: Syntax) -> list[str]:
    return [syntax.indent + line for line in lines]
