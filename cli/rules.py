"""Options that say how the numbers of quantities change when they are carried."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from .usage import UsageError

if TYPE_CHECKING:
    from volmap.types import Rules

WORDS = ("value", "density", "turn", "line", "gradient", "flux")


def rule_arguments(parser: argparse.ArgumentParser) -> None:
    """`--rule WORD` and `--rule QUANTITY=WORD`, as often as needed."""
    parser.add_argument(
        "--rule",
        action="append",
        default=[],
        metavar="[QUANTITY=]RULE",
        help="how numbers change: value (kept) or density (amount kept) for scalars; turn (length kept), "
        "line, gradient or flux for vectors and symmetric tensors; for one QUANTITY, or for all it fits",
    )
    parser.add_argument(
        "--leave-out",
        action="append",
        default=[],
        metavar="QUANTITY",
        help="of a table or a mesh with data: do not carry this quantity",
    )


def rules_of(options: argparse.Namespace) -> Rules:
    """What the options say.

    Raises
    ------
    UsageError
        A word that is no rule, or two rules for the same.
    """
    from volmap.types import Rule, Rules

    said: dict[str, Rule] = {}
    for text in options.rule:
        name, _, word = text.rpartition("=")
        if word not in WORDS:
            raise UsageError(f"--rule {text!r}: {word!r} is none of {', '.join(WORDS)}")
        if said.get(name, word) != word:
            raise UsageError(f"--rule {text!r}: another rule was given for {name or 'all quantities'}")
        said[name] = Rule(word)
    of_all = said.pop("", None)
    return Rules(of_all, said, tuple(options.leave_out))
