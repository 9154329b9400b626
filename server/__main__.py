"""The command line: ``crossdip serve``, ``crossdip run``, ``crossdip bench``."""

import argparse
import os
import sys
from pathlib import Path

from server.errors import SettingsError


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="crossdip",
        description="Polarization domains of partially coherent waves in normally dispersive "
        "fibre: the lab server and its command line.",
    )
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")

    serve = commands.add_parser(
        "serve",
        help="start the lab server",
        description="Start the lab server. Every flag has an environment variable beside it: "
        "--max-samples is CROSSDIP_MAX_SAMPLES.",
    )
    serve.add_argument("--host", help="address to listen on (127.0.0.1)")
    serve.add_argument("--port", help="port to listen on; 0 takes a free one (8014)")
    serve.add_argument("--data", help="data folder ($XDG_DATA_HOME/crossdip)")
    serve.add_argument(
        "--access-key",
        help="key for full access, 16 characters or more; better set as CROSSDIP_ACCESS_KEY, "
        "which other users of this machine cannot read",
    )
    serve.add_argument(
        "--new-access-key",
        action="store_true",
        default=None,
        help="make new access keys and print their links; older ones stop working",
    )
    serve.add_argument("--max-samples", help="most samples in a window (131072)")
    serve.add_argument("--max-points", help="most points, variants times sweep points (480)")
    serve.add_argument("--max-realizations", help="most realizations of a point (20000)")
    _add_engine_flags(serve)

    run = commands.add_parser(
        "run",
        help="compute one study and write its result file",
        description="Compute the study of a JSON file, as the page exports it, and write HDF5. "
        "The file {} is the headline study.",
    )
    run.add_argument("study", metavar="STUDY.json", help="the study; - reads standard input")
    run.add_argument("-o", "--output", required=True, metavar="RESULT.h5", help="file to write")
    run.add_argument("--title", help="title kept in the result file")
    _add_engine_flags(run)

    bench = commands.add_parser(
        "bench", help="measure this machine", description="Measure the speed of this machine."
    )
    bench.add_argument("arguments", nargs=argparse.REMAINDER, help=argparse.SUPPRESS)
    return parser


def _add_engine_flags(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--workers", help="worker processes (one for each usable core)")
    parser.add_argument(
        "--cluster",
        metavar="ADDRESS",
        help="use the Dask scheduler at this address instead, tcp://HOST:PORT or tls://HOST:PORT",
    )
    for name, what in (
        ("ca", "certificate of the authority"),
        ("certificate", "this machine's certificate"),
        ("key", "its private key"),
    ):
        parser.add_argument(f"--cluster-{name}", metavar="FILE", help=f"for tls://: {what}, PEM")


def main(arguments: list[str] | None = None) -> int:
    """Run one command; its exit status. Bad input is one line on standard error and 2."""
    given = sys.argv[1:] if arguments is None else arguments
    if given[:1] == ["bench"]:
        from server import bench

        return bench.main(given[1:])
    flags = vars(_parser().parse_args(given))
    command = flags.pop("command")
    try:
        # Imported late: --help and a wrong flag should answer at once.
        if command == "serve":
            from server.serving import serve

            return serve(flags, os.environ)
        from server.command import run_study

        output = Path(flags.pop("output"))
        return run_study(flags.pop("study"), output, flags.pop("title"), flags, os.environ)
    except SettingsError as error:
        print(f"crossdip: {error}", file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        return 130


if __name__ == "__main__":
    sys.exit(main())
