"""The command line: ``fieldnav VERB``. Exit code 0 done, 1 the work failed, 2 bad input."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from fieldnav_ros import __version__
from fieldnav_ros.arguments import number
from fieldnav_ros.bags import command as bags
from fieldnav_ros.errors import FieldnavError, InputError
from fieldnav_ros.prepare import command as prepare
from fieldnav_ros.report import command as report
from fieldnav_ros.report import survey_command

SAFETY = (
    "Robots can hurt: clear the floor, keep the hardware stop in hand. This software is no safety system; "
    "local rules and the event's marshals come first."
)
Summary = dict[str, Any]
"""What a verb has to tell a machine; its key ``ok`` says whether the work succeeded (true where left out)."""


def _demo(arguments: argparse.Namespace) -> Summary:
    from fieldnav_ros.nodes.demo import run_demo  # rclpy is needed by this verb alone

    return run_demo(arguments.out, arguments.floor_time, arguments.seed, arguments.record)


def _report(arguments: argparse.Namespace) -> Summary:
    from fieldnav_ros.nodes.payloads import decode_request

    summary = report.run(arguments, decode_request)
    print(summary["page"])
    for sentence in summary.get("unreadable_bags", []):
        print(f"fieldnav: {sentence}", file=sys.stderr)
    return summary


def _survey(arguments: argparse.Namespace) -> Summary:
    lines, summary = survey_command.run(arguments)
    print("\n".join(lines))
    return summary


def _rescore(arguments: argparse.Namespace) -> Summary:
    from fieldnav_ros.nodes.payloads import decode_request

    return bags.run(arguments, decode_request, print)


def _pit(arguments: argparse.Namespace) -> Summary:
    from fieldnav_ros.nodes.pit import command  # rclpy and rich are needed by these verbs alone

    return command.run(arguments.namespace, arguments.tuner, arguments.watch)


def _rehearse(arguments: argparse.Namespace) -> Summary:
    from fieldnav_ros.nodes.rehearse import Rehearsal, run_rehearsal

    names = ("floor_time", "speed", "seed", "grade", "outcomes", "starts", "record", "yard", "floor")
    return run_rehearsal(Rehearsal(arguments.out, **{name: getattr(arguments, name) for name in names}))


def build_parser() -> argparse.ArgumentParser:
    """Return the parser of all verbs."""
    parser = _Parser(prog="fieldnav", description="Retune a robot's heading-field guidance.", epilog=SAFETY)
    parser.add_argument("--version", action="version", version=f"fieldnav {__version__}")
    verbs = parser.add_subparsers(dest="verb", required=True, metavar="VERB")
    demo = _verb(verbs, "demo", _demo, "real nodes in simulation retune a robot on the parcel yard")
    demo.add_argument("--out", type=Path, help="folder for the files (default: fieldnav_demo, numbered if it exists)")
    demo.add_argument(
        "--floor-time", type=number("--floor-time", 1, 600), default=45.0, metavar="MIN",
        help="simulated minutes of floor time (default: %(default)g)",
    )  # fmt: skip
    demo.add_argument(
        "--seed", type=number("--seed", 0, 2**31, int), default=1, help="seed of the session (default: %(default)s)"
    )
    demo.add_argument("--record", action="store_true", help="a bag of each episode as well, in the folder bags")
    pit = _verb(verbs, "pit", _pit, "the operator's terminal beside the floor")
    pit.add_argument("--namespace", default="", metavar="NS", help="namespace of the nodes (default: none)")
    pit.add_argument("--tuner", default="tuner_node", metavar="NAME", help="name of the tuner (default: %(default)s)")
    pit.add_argument("--watch", action="store_true", help="only look: no key but q does anything")
    _rehearse_arguments(_verb(verbs, "rehearse", _rehearse, "a session at home, on a simulated floor"))
    prepare.add_arguments(_verb(verbs, "pretune", prepare.run, "tune in simulation; writes a prior for the site"))
    survey_command.add_arguments(_verb(verbs, "survey", _survey, "the field as a picture, with its faults marked"))
    report.add_arguments(_verb(verbs, "report", _report, "one page with pictures from a session's ledger"))
    bags.add_arguments(_verb(verbs, "rescore", _rescore, "outcomes again from bags, beside those of the ledger"))
    return parser


def _rehearse_arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--out", type=Path, default=Path("rehearsal"), metavar="DIR", help="folder for the files (default: %(default)s)"
    )
    parser.add_argument(
        "--floor-time", type=number("--floor-time", 0.5, 600), default=12.0, metavar="MIN",
        help="simulated minutes of floor time (default: %(default)g)",
    )  # fmt: skip
    parser.add_argument(
        "--speed", type=number("--speed", 0.1, 10), default=1.0, help="multiple of real time (default: %(default)g)"
    )
    parser.add_argument("--seed", type=number("--seed", 0, 2**31, int), default=1, help="default: %(default)s")
    parser.add_argument("--yard", type=Path, help="what the session is told of the floor (default: the parcel yard)")
    parser.add_argument("--floor", type=Path, help="what the floor is like, a yard file too (default: an invented one)")
    parser.add_argument("--grade", default="moving", help="grade of the yard (default: %(default)s)")
    parser.add_argument("--outcomes", choices=("judge", "operator"), default="judge", help="whose outcomes count")
    parser.add_argument("--starts", choices=("region", "marks"), default="region", help="where episodes start")
    parser.add_argument("--record", action="store_true", help="one bag for each episode")


class _Parser(argparse.ArgumentParser):
    """Tells of a wrong argument in one sentence, like every other error here."""

    def error(self, message: str) -> Any:
        raise InputError(f"{message}; see {self.prog} --help")


def _verb(verbs: Any, name: str, run: Callable[[argparse.Namespace], Summary], about: str) -> argparse.ArgumentParser:
    parser: argparse.ArgumentParser = verbs.add_parser(name, help=about, description=about.capitalize() + ".")
    parser.set_defaults(run=run)
    parser.add_argument("--json", action="store_true", help="last line on standard output: a summary as JSON")
    return parser


def main(argv: Sequence[str] | None = None) -> int:
    """Run one verb and return the exit code."""
    try:
        arguments = build_parser().parse_args(argv)
        summary = arguments.run(arguments)
        if arguments.json:
            print(json.dumps(summary), flush=True)
        return 0 if summary.get("ok", True) else 1
    except FieldnavError as error:
        print(f"fieldnav: {error}", file=sys.stderr)
        return error.exit_code
    except KeyboardInterrupt:
        print("fieldnav: stopped", file=sys.stderr)
        return 1
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1


if __name__ == "__main__":
    raise SystemExit(main())
