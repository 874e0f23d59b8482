"""The command line: which side to check, where, and how to print what was found."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Mapping, Sequence

from conformance import clauses
from conformance.device_run import Stop, check_device
from conformance.host_run import play_over_pty, ptys_exist
from conformance.host_scripts import SCRIPTS
from conformance.report import Result, failed, table
from conformance.wire import SerialPort

DONE, WRONG = 0, 1


def main(words: Sequence[str]) -> int:
    """0 where no clause failed, else 1."""
    options = _parser().parse_args(words)
    run = _device if options.side == "device" else _host
    return run(options)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python protocol/conformance",
        description="Check a device or a host against the clauses of protocol/SPEC.md.",
    )
    sides = parser.add_subparsers(dest="side", required=True)
    device = sides.add_parser("device", help="check the device on a port")
    device.add_argument("port", metavar="PORT", help="/dev/ttyACM0, COM5, socket://host:port")
    device.add_argument(
        "--allow-sweep",
        action="store_true",
        help="on a real device too: arm, and close its contact for a few sweeps. With it you "
        "confirm that the source stands alone and that nobody can touch the terminals.",
    )
    device.add_argument(
        "--slow",
        type=float,
        default=1.0,
        metavar="N",
        help="N times slower than a board: a chip's emulator",
    )
    host = sides.add_parser("host", help="play a scripted device to a host")
    host.add_argument(
        "--script", action="append", choices=[script.name for script in SCRIPTS], help="only these"
    )
    for side in (device, host):
        side.add_argument("--json", action="store_true", help="one object per check")
    return parser


def _device(options: argparse.Namespace) -> int:
    try:
        port = SerialPort(options.port, slow=options.slow)
    except (OSError, ValueError) as error:
        return _stopped(f"opening {options.port}: {error}")
    try:
        results = check_device(port, allow_sweep=options.allow_sweep, tell=_progress)
    except (Stop, OSError) as error:
        return _stopped(str(error))
    except KeyboardInterrupt:
        return _stopped("ended by hand; the device has been told to abort")
    finally:
        port.close()
    return _print(results, clauses.DEVICE, as_json=options.json)


def _host(options: argparse.Namespace) -> int:
    if not ptys_exist():
        return _stopped("a scripted device needs a pseudo-terminal, which this system has not")
    wanted = options.script or [script.name for script in SCRIPTS]
    scripts = [script for script in SCRIPTS if script.name in wanted]
    try:
        results = play_over_pty(scripts, _say)
    except KeyboardInterrupt:
        return _stopped("ended before all scripts were played")
    return _print(results, clauses.HOST, as_json=options.json)


def _print(results: Sequence[Result], sides: Mapping[str, str], *, as_json: bool) -> int:
    if as_json:
        for result in results:
            print(result.json())
    else:
        print(table(sides, results))
    return WRONG if failed(results) else DONE


def _say(text: str) -> None:
    """For people: on standard error, so that what is printed stays data."""
    print(text, file=sys.stderr, flush=True)


def _progress(result: Result) -> None:
    _say(f"{result.check}: {result.outcome}")


def _stopped(why: str) -> int:
    _say(why)
    return WRONG
