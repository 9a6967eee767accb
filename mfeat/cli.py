"""The command line: it parses and delegates; everything it does can be imported.

Exit codes: 0 done, 2 unusable arguments, 3 files that cannot be written, 130 interrupted. Results
go to stdout and into files, messages to stderr.
"""

import argparse
import logging
import sys
from collections.abc import Sequence
from pathlib import Path

from mfeat import __version__, demo


def build_parser() -> argparse.ArgumentParser:
    """Return the parser of the command `mfeat`."""
    parser = argparse.ArgumentParser(
        prog="mfeat",
        description="Minkowski curves of image patches as feature vectors.",
        epilog="A classifier's verdict is an aid: validate it on your own parts and measuring "
        "system. Safety-related acceptance follows the applicable standards and qualified people.",
    )
    parser.add_argument("--version", action="version", version=f"mfeat {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")
    write = commands.add_parser(
        "demo",
        help="write simulated height maps of powder-coated panels, with truth and a manifest",
        description="Write simulated height maps of powder-coated metal panels (TIFF, float32 "
        "micrometres, NaN where missing), their truth and a manifest; prints the manifest's path.",
    )
    write.add_argument("--out", type=Path, required=True, help="a new or empty folder")
    write.add_argument("--panels", type=int, default=4, help="panels per condition (default 4)")
    write.add_argument("--side", type=int, default=512, help="side in pixels (default 512)")
    write.add_argument("--pitch", type=float, default=10.0, help="pitch in um (default 10)")
    write.add_argument("--seed", type=int, default=0, help="seed of the first panel (default 0)")
    return parser


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line; returns the exit code.

    Examples
    --------
    >>> from mfeat.cli import main
    >>> main(["demo", "--out", "/dev/null"])
    2
    """
    logging.basicConfig(stream=sys.stderr, format="mfeat: %(message)s", level=logging.WARNING)
    options = build_parser().parse_args(argv)
    try:
        manifest = demo.write_demo(
            options.out,
            options.panels,
            side=options.side,
            pitch=options.pitch,
            seed=options.seed,
        )
    except (ValueError, TypeError, FileExistsError, NotADirectoryError) as error:
        return _stopped(f"mfeat demo: {error}", 2)
    except OSError as error:
        return _stopped(f"mfeat demo: no file is left in {options.out}: {error}", 3)
    except KeyboardInterrupt:
        return _stopped(f"mfeat demo: interrupted; no file is left in {options.out}", 130)
    try:
        print(manifest, flush=True)
    except OSError as error:
        sys.stdout = None  # so that Python does not try to flush it again on the way out
        return _stopped(f"mfeat demo: {manifest} is written, but stdout failed: {error}", 3)
    return 0


def _stopped(message: str, code: int) -> int:
    print(message, file=sys.stderr)
    return code
