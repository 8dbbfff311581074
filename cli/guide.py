"""Pages that explain: directions, what to carry how, the certificate, measures, limits, formats, privacy."""

from __future__ import annotations

import argparse
import shutil

from .console import Console
from .pages import as_text, pages
from .usage import UsageError

HELP = "pages that explain; without a topic, which there are"
EXAMPLE = "volmap guide directions"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("topic", nargs="?", metavar="TOPIC", help="page to show (default: list them)")


def run(options: argparse.Namespace, console: Console) -> int:
    """Show a page, or which there are."""
    known = pages()
    if options.topic is None:
        widest = max(map(len, known))
        for page in known.values():
            console.say(f"  {page.topic.ljust(widest)}  {page.title}")
        console.result({"topics": [{"topic": p.topic, "title": p.title} for p in known.values()]})
    elif options.topic not in known:
        raise UsageError(f"no page is called {options.topic!r}; there are {', '.join(known)}")
    else:
        page = known[options.topic]
        console.say(as_text(page, shutil.get_terminal_size((WIDE, 24)).columns))
        console.say("")
        console.result({"topic": page.topic, "title": page.title, "text": page.markdown})
    console.end()
    return 0


WIDE = 100  # where nothing tells how wide the terminal is
