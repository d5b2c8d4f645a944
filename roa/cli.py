"""The command line: arguments, progress, exit codes. What the words do is in `roa.verbs`."""

from __future__ import annotations

import argparse
import json
import os
import shlex
import sys
import time
from collections.abc import Callable, Sequence
from contextlib import suppress
from typing import TYPE_CHECKING, Any, NoReturn

from roa import __version__
from roa.errors import RoaError
from roa.interruption import watched

if TYPE_CHECKING:
    from roa.verbs import Result

# Between two looks of `status --watch`, s.
WATCH = 5.0
USAGE_ERROR, MACHINE_FAILED, INTERRUPTED = 2, 4, 130

EXIT_CODES = """\
exit codes
  0    done; for a claim: proved, or supported where the configuration accepts that
  1    the claim is refuted; `replay`: the outcomes differ
  2    the configuration or the command cannot be carried out; nothing was written
  3    the claim is not settled: the text says what was reached and what is missing
  4    the machine failed: disk full, store damaged
  130  interrupted, resumable
"""


class _Parser(argparse.ArgumentParser):
    """A parser whose errors are one sentence."""

    def error(self, message: str) -> NoReturn:
        print(f"{self.prog}: {message}; `{self.prog} --help` shows what is accepted", file=sys.stderr)
        raise SystemExit(USAGE_ERROR)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code."""
    given = sys.argv[1:] if arguments is None else list(arguments)
    if any(word.partition("=")[0] == "--cluster" for word in given):
        print("roa: --cluster: not yet supported by this version; leave it out", file=sys.stderr)
        return USAGE_ERROR
    options = vars(_parser().parse_args(given))
    if options.get("watch") and options["json"]:
        print(
            "roa status: --watch and --json: one JSON document cannot be watched; give one of the two", file=sys.stderr
        )
        return USAGE_ERROR
    verb, as_json, quiet = options.pop("verb"), options.pop("json"), options.pop("quiet")
    try:
        with watched():
            result = _call(verb, options, quiet, shlex.join(["roa", *given]))
    except RoaError as error:
        for fault in error.faults:
            print(f"roa: {fault}", file=sys.stderr)
        return error.exit_code
    except KeyboardInterrupt as interruption:
        print(f"roa: {str(interruption) or 'interrupted'}", file=sys.stderr)
        return INTERRUPTED
    except OSError as error:
        print(f"roa: the machine failed: {error}", file=sys.stderr)
        return MACHINE_FAILED
    except Exception as error:
        if os.environ.get("ROA_TRACEBACK"):
            raise
        print(
            f"roa: a fault of this program, {type(error).__name__}: {error}; please report it with what "
            "`ROA_TRACEBACK=1 roa …` prints",
            file=sys.stderr,
        )
        return MACHINE_FAILED
    _print(json.dumps(result.document, indent=1, ensure_ascii=False) + "\n" if as_json else result.text)
    if result.note:
        print(f"roa: {result.note}", file=sys.stderr)
    return result.exit_code


def _call(verb: str, options: dict[str, Any], quiet: bool, command: str) -> Result:
    from roa import verbs
    from roa.sweep.progress import on_standard_error

    if verb not in ("init", "report", "status"):
        options["progress"] = on_standard_error(quiet)
    if verb in ("run", "sweep", "resume", "bound", "validate"):
        options["command"] = command
    if options.pop("watch", False):
        return _watch(options["run"])
    function: Callable[..., Result] = getattr(verbs, verb)
    return function(**options)


def _watch(run: str) -> Result:
    """Print how far a sweep is, again and again; return how it stands when it does not run any more."""
    from roa import verbs

    while True:
        result = verbs.status(run)
        if result.document["state"] != "running":
            return result
        _print(("\x1b[H\x1b[J" if sys.stdout.isatty() else "") + result.text)
        time.sleep(WATCH)


def _print(text: str) -> None:
    try:
        sys.stdout.write(text if text.endswith("\n") else text + "\n")
        sys.stdout.flush()
    except BrokenPipeError:
        # Whoever read our output has gone; what was concluded is on disk and in the exit code.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="roa",
        description="Validate a Lyapunov bound of a nonlinear closed loop against its simulated basin.",
        epilog=EXIT_CODES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"roa {__version__}")
    verbs = parser.add_subparsers(dest="verb", required=True, metavar="COMMAND", parser_class=_Parser)

    def verb(name: str, text: str, *options: str) -> argparse.ArgumentParser:
        command = verbs.add_parser(name, help=text, description=text[0].upper() + text[1:] + ".")
        for option in options:
            command.add_argument(option, **_OPTIONS[option])
        command.add_argument("--json", action="store_true", help="one JSON document on standard output")
        command.add_argument("--quiet", action="store_true", help="no progress on standard error")
        return command

    config: dict[str, Any] = {"metavar": "CONFIG", "help": "configuration file (TOML)"}
    folder: dict[str, Any] = {"metavar": "RUN", "help": "folder of a run"}
    means = ("--jobs", "--hours", "--executor")
    verb("init", "write a commented configuration to start from").add_argument("file", metavar="FILE")
    verb("check", "is it sound, and what will it cost", "--samples", "--seed", "--jobs", "--quick").add_argument(
        "config", **config
    )
    for name, text in (("run", "the whole job: bound, sweep, comparison, figures, report, verdict"),
                       ("sweep", "the simulation alone")):  # fmt: skip
        verb(name, text, "--out", "--samples", "--seed", "--quick", *means).add_argument("config", **config)
    verb("bound", "the analytic estimates alone", "--out", "--seed", "--jobs", "--quick").add_argument(
        "config", **config
    )
    verb("validate", "judge the claimed bound", "--out", "--seed", "--jobs", "--quick").add_argument("config", **config)
    verb("resume", "carry on a sweep that stopped, or extend one", "--samples", *means).add_argument("run", **folder)
    replay = verb("replay", "integrate one start again by an independent integrator", "--jobs")
    replay.add_argument(
        "source", metavar="RUN|CONFIG", help="a run with INDEX or --audit, or a configuration with --from"
    )
    which = replay.add_mutually_exclusive_group(required=True)
    which.add_argument("index", metavar="INDEX", type=int, nargs="?", help="number of a stored start")
    which.add_argument(
        "--audit",
        metavar="N",
        type=_whole(1, 2**20, "from 1 to 2**20"),
        help="so many stored starts",
    )
    which.add_argument("--from", dest="start", metavar="STATE=VALUE,…", help="any start, every state named")
    status = verb("status", "how far a sweep is, asked from another shell")
    status.add_argument("run", **folder)
    status.add_argument("--watch", action="store_true", help="again every few seconds, until it does not run any more")
    overlay = verb("overlay", "draw the figures of a run again, or two runs in one picture", "--jobs")
    overlay.add_argument("run", **folder)
    overlay.add_argument("other", metavar="RUN2", nargs="?", help="a second run, to be drawn against the first")
    overlay.add_argument("--states", metavar="A,B", help="the pair of states that is shown")
    overlay.add_argument("--at", metavar="STATE=VALUE,…", help="where other states are held (default: the equilibrium)")
    overlay.add_argument("--only", metavar="NAME,…", help="the figures that are wanted (default: all)")
    overlay.add_argument("--format", dest="formats", metavar="KIND,…", help="png, svg, pdf (default: png,svg)")
    overlay.add_argument("--dpi", metavar="N", type=_whole(20, 2400, "from 20 to 2400"), help="dots an inch (200)")
    overlay.add_argument("--rising", action="store_true", help="hatch where V does not decrease")
    verb("report", "write the report of a run again, from what is stored").add_argument("run", **folder)
    return parser


def _whole(low: int, high: int, words: str) -> Callable[[str], int]:
    """Return a reader of whole numbers from low to high."""

    def read(text: str) -> int:
        with suppress(ValueError):
            if low <= int(text) <= high:
                return int(text)
        raise argparse.ArgumentTypeError(f"must be a whole number {words}, '{text}' found")

    return read


def _hours(text: str) -> float:
    with suppress(ValueError):
        if 0 < float(text) < float("inf"):
            return float(text)
    raise argparse.ArgumentTypeError(f"must be a number above 0, such as 7.5, '{text}' found")


_OPTIONS: dict[str, dict[str, Any]] = {
    "--out": {"metavar": "DIR", "help": "the run folder itself (default: results/<configuration>-<date>-<time>)"},
    "--jobs": {
        "metavar": "N",
        "type": _whole(1, 4096, "from 1 to 4096"),
        "help": "workers (default: the processors this process may use)",
    },
    "--hours": {
        "metavar": "H",
        "type": _hours,
        "help": "stop in time, with the statistics of what is done and exit code 130",
    },
    "--executor": {
        "metavar": "NAME",
        "choices": ("serial", "threads", "processes"),
        "help": "how blocks are spread: serial, threads, processes (default: threads)",
    },
    "--samples": {
        "metavar": "N",
        "type": _whole(1, 2**40, "from 1 to 2**40"),
        "help": "number of starts, in place of the configuration's",
    },
    "--seed": {
        "metavar": "N",
        "type": _whole(0, 2**63 - 1, "from 0 to 2**63 - 1"),
        "help": "seed of the design and of every search",
    },
    "--quick": {"action": "store_true", "help": "leave out the search for better bounds"},
}

if __name__ == "__main__":
    raise SystemExit(main())
