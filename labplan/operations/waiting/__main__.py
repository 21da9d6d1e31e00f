"""python -m labplan.operations.waiting --listen 127.0.0.1:8000 --web unix:/run/web.sock"""

import argparse
import asyncio
import logging.config
import os
import re
import sys
from collections.abc import Callable, Sequence

from labplan.base.logs import STYLES, logging_configuration
from labplan.operations.waiting.front import MOST_WAITING
from labplan.operations.waiting.server import Options, serve_until_told

_LISTEN = re.compile(r"unix:.+|(\[[0-9a-fA-F:.]+\]|[^:/\s]+):[0-9]{1,5}")
_WEB = re.compile(r"unix:.+|http://(\[[0-9a-fA-F:.]+\]|[^:/\s]+)(:[0-9]{1,5})?/?")
_BROKER = re.compile(r"(redis|rediss|redis\+socket|unix)://\S+")


def main(arguments: Sequence[str] | None = None) -> int:
    options = _read(arguments)
    style = os.environ.get("LABPLAN_LOG") or "plain"
    logging.config.dictConfig(logging_configuration(style if style in STYLES else "plain"))
    try:
        asyncio.run(serve_until_told(options))
    except OSError as error:
        print(f"{options.listen} cannot be listened on: {error}.", file=sys.stderr)
        return 1
    return 0


def _read(arguments: Sequence[str] | None) -> Options:
    parser = argparse.ArgumentParser(
        prog="python -m labplan.operations.waiting",
        description="Pass requests on to the web service; hold a GET with Prefer: wait=N until "
        "there is something new to say.",
    )
    parser.add_argument("--listen", required=True, type=_like(_LISTEN), help="host:port, unix:PATH")
    parser.add_argument(
        "--web", required=True, type=_like(_WEB), help="unix:PATH, http://host:port"
    )
    parser.add_argument(
        "--broker", default="", type=_like(_BROKER),
        help="redis://... or redis+socket:///PATH; without one, each is looked at once a second",
    )  # fmt: skip
    parser.add_argument(
        "--most-waiting", type=_count, default=MOST_WAITING,
        help="how many may wait at a time; the next gets the present answer (default %(default)s)",
    )  # fmt: skip
    return Options(**vars(parser.parse_args(arguments)))


def _like(form: re.Pattern[str]) -> Callable[[str], str]:
    def read(text: str) -> str:
        if text and not form.fullmatch(text):
            raise argparse.ArgumentTypeError(f"{text!r} does not have this form")
        return text

    return read


def _count(text: str) -> int:
    if not (text.isascii() and text.isdigit()):
        raise argparse.ArgumentTypeError("give a whole number, 0 or more")
    return int(text)


if __name__ == "__main__":
    sys.exit(main())
