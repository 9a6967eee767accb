"""The command line: it parses and delegates; everything it does can be imported.

Exit codes: 0 done, 1 done with rejects under ``--strict``, 2 unusable arguments, 3 files that
cannot be written or have changed, or an unforeseen error, 130 interrupted. Results go to stdout and
into files, messages to stderr.
"""

import argparse
import logging
import sys
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from mfeat import __version__, demo
from mfeat.candidates import CLASSIFIERS, OWN
from mfeat.compare import compare
from mfeat.conditions import CONDITIONS
from mfeat.descriptors import DESCRIPTORS
from mfeat.dump import RejectsFound, dump
from mfeat.estimate import estimate
from mfeat.images import MAX_PIXELS
from mfeat.options import (
    KEYS,
    LABELS_FROM,
    REGIONS,
    dump_settings,
    feature_value,
    read_settings,
    with_features,
)
from mfeat.parts import InputChanged
from mfeat.patches import EDGE_RULES, LABEL_RULES
from mfeat.report import REPORT_HTML, verdict
from mfeat.storage import OutputInUse
from mfeat.transformer import MinkowskiCurves
from mfeat.trials import PROTOCOLS
from mfeat.workers import BACKENDS


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
    write.set_defaults(work=_demo)
    _add_dump(commands)
    _add_compare(commands)
    return parser


def _add_dump(commands: Any) -> None:
    table = commands.add_parser(
        "dump",
        help="turn a folder, glob or manifest of images into a Parquet feature table",
        description="Turn images into a feature table of Parquet parts; prints its folder. An "
        "interrupted run goes on when the same command is given again.",
    )
    table.add_argument(
        "source",
        metavar="SOURCE",
        help="a folder, a quoted pattern such as 'scans/**/*.tif', an image, or a manifest (CSV or "
        "Parquet) with a column path and optional columns label, group, mask, row, col, height, "
        "width, pitch_x, pitch_y, unit, truth; others go into the table",
    )
    table.add_argument("--out", metavar="DIR", help="folder or URI of the table")
    what = table.add_argument_group("what to compute")
    what.add_argument(
        "--size", type=_sides, metavar="N", help="side of a patch, or ROWSxCOLUMNS (default 64)"
    )
    what.add_argument(
        "--stride", type=_sides, metavar="N", help="step from patch to patch (default: size)"
    )
    what.add_argument(
        "--edge",
        choices=EDGE_RULES,
        help="drop what the grid does not reach, or shift the last patches (default drop)",
    )
    _add_reading(what)
    what.add_argument(
        "--set",
        action="append",
        default=[],
        metavar="NAME=VALUE",
        dest="features",
        help="a parameter of MinkowskiCurves, e.g. --set levels=32 --set 'smooth=[1, 2]'",
    )
    what.add_argument(
        "--settings",
        metavar="FILE.toml",
        help=f"a file with {', '.join(KEYS)} and a table [features]; flags override it",
    )
    how = table.add_argument_group("how to run")
    how.add_argument("--jobs", type=int, metavar="N", help="workers (default: all processors)")
    how.add_argument("--backend", choices=BACKENDS, help="threads or processes (default threads)")
    how.add_argument(
        "--cluster", metavar="ADDRESS", help="a Dask scheduler, whose workers see the same files"
    )
    how.add_argument(
        "--dry-run",
        action="store_true",
        help="write nothing; print the plan, with size and time from a sample, and the settings "
        "as TOML",
    )
    how.add_argument("--strict", action="store_true", help="exit with 1 if anything was rejected")
    how.add_argument(
        "--fresh",
        action="store_true",
        help="start anew; the old table stays until the new one is complete",
    )
    table.set_defaults(work=_dump)


def _add_reading(group: Any) -> None:
    """Add the flags that say how images are read and labelled."""
    group.add_argument(
        "--regions",
        choices=REGIONS,
        help="a region of the manifest is one patch, or has a grid inside (default patch)",
    )
    group.add_argument(
        "--label-from",
        choices=LABELS_FROM,
        help="manifest: its column label (taken anyway); folder: the name of the folder that an "
        "image lies in; truth: images of labels",
    )
    group.add_argument(
        "--truth-rule",
        choices=LABEL_RULES,
        help="label of a patch from an image of labels (default majority)",
    )
    group.add_argument(
        "--channel",
        type=_channel,
        metavar="NAME",
        help="luminance, red, green, blue, or a number (default luminance)",
    )
    group.add_argument(
        "--missing-value",
        type=float,
        metavar="V",
        help="pixels of this value are missing, as NaN are",
    )
    group.add_argument(
        "--max-pixels",
        type=int,
        metavar="N",
        help=f"reject images that need more pixels decoded at once (default {MAX_PIXELS})",
    )


def _add_compare(commands: Any) -> None:
    table = commands.add_parser(
        "compare",
        help="compare descriptors on your own images, under changes of light, focus and more",
        description="Compare texture descriptors: on images each of which is a class, or on "
        "labelled patches. Writes every single result, and a report with charts; prints the "
        "report. An interrupted run goes on when the same command is given again.",
    )
    table.add_argument(
        "source",
        metavar="SOURCE",
        help="a folder, a quoted pattern, a manifest (see mfeat dump), or a table made by dump",
    )
    table.add_argument("--out", metavar="DIR", required=True, help="folder or URI of the results")
    what = table.add_argument_group("what to compare")
    what.add_argument(
        "--descriptor",
        action="append",
        metavar="NAME",
        dest="descriptors",
        help=f"{OWN}, {', '.join(DESCRIPTORS)}, or an import path package.module:name; again for "
        "each (default: all). The first is the one that the others are compared with",
    )
    what.add_argument(
        "--ablation",
        action="store_true",
        help=f"variants of {OWN}, too: each part left out, alone, or done otherwise",
    )
    what.add_argument(
        "--condition",
        action="append",
        choices=tuple(CONDITIONS),
        dest="conditions",
        help="change of the test patches; again for each (default: all that suit the images)",
    )
    what.add_argument(
        "--classifier",
        action="append",
        choices=tuple(CLASSIFIERS),
        dest="classifiers",
        help="again for each (default: both)",
    )
    what.add_argument(
        "--protocol",
        choices=PROTOCOLS,
        help="halves: every image is a class, one half trains; groups: labelled patches, no group "
        "on both sides (default: groups where there are labels)",
    )
    what.add_argument(
        "--size",
        type=_sides,
        action="append",
        metavar="N",
        help="side of a patch, or ROWSxCOLUMNS; again for each (default 64)",
    )
    what.add_argument(
        "--train",
        type=int,
        action="append",
        metavar="N",
        help="training patches a class; again for each (default: those of 2, 4, 8, 16 that all "
        "classes have)",
    )
    what.add_argument("--test", type=int, metavar="N", help="test patches a class (default 16)")
    what.add_argument(
        "--patches", type=int, metavar="N", help="labelled patches a class at most (default 100)"
    )
    what.add_argument("--repeats", type=int, metavar="N", help="random repeats (default 10)")
    what.add_argument("--folds", type=int, metavar="N", help="folds of groups (default 5)")
    what.add_argument("--seed", type=int, metavar="N", help="of all that is random (default 0)")
    what.add_argument(
        "--set",
        action="append",
        default=[],
        metavar="NAME=VALUE",
        dest="features",
        help=f"a parameter of {OWN}, e.g. --set levels=32",
    )
    _add_reading(table.add_argument_group("how images are read"))
    how = table.add_argument_group("how to run")
    how.add_argument("--jobs", type=int, metavar="N", help="workers (default: all processors)")
    how.add_argument("--backend", choices=BACKENDS, help="threads or processes (default loky)")
    how.add_argument("--fresh", action="store_true", help="start anew, in place of what DIR holds")
    table.set_defaults(work=_compare)


def _sides(text: str) -> int | tuple[int, ...]:
    try:
        numbers = tuple(int(part) for part in text.split("x"))
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"{text!r} is neither a number of pixels nor ROWSxCOLUMNS, e.g. 64 or 64x32"
        ) from None
    return numbers[0] if len(numbers) == 1 else numbers


def _channel(text: str) -> str | int:
    return int(text) if text.isdigit() else text


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line; returns the exit code.

    Examples
    --------
    >>> from mfeat.cli import main
    >>> main(["demo", "--out", "/dev/null"])
    2
    """
    logging.basicConfig(stream=sys.stderr, format="mfeat: %(message)s", level=logging.WARNING)
    # What a decoder remarks on damaged files is in the reasons of the rejects.
    logging.getLogger("tifffile").setLevel(logging.CRITICAL)
    parser = build_parser()
    options = parser.parse_args(argv)
    if options.command == "dump" and options.out is None and not options.dry_run:
        parser.error("dump needs --out DIR, unless with --dry-run")
    return options.work(options)


def _demo(options: argparse.Namespace) -> int:
    def write() -> str:
        return str(
            demo.write_demo(
                options.out,
                options.panels,
                side=options.side,
                pitch=options.pitch,
                seed=options.seed,
            )
        )

    return _run("demo", write, "is written", f"no file is left in {options.out}")


def _dump(options: argparse.Namespace) -> int:
    def run() -> str:
        arguments = _dump_arguments(options)
        how = {name: arguments.pop(name) for name in ("jobs", "backend") if name in arguments}
        how["cluster"] = options.cluster
        if options.dry_run:
            settings = dump_settings(**arguments)
            found = estimate(options.source, settings, out=options.out or "", **how)
            lines = "".join(f"# {_printable(line)}\n" for line in str(found).splitlines())
            return f"{lines}\n{settings.toml()}".rstrip()
        summary = dump(options.source, options.out, fresh=options.fresh, **arguments, **how)
        print(f"mfeat dump: {summary}", file=sys.stderr)
        if options.strict and summary.rejects:
            raise RejectsFound(summary)
        return summary.out

    if options.dry_run:
        return _run("dump", run, "", "nothing is written")
    again = "the same command" + (" without --fresh" if options.fresh else "")
    kept = f"what is finished is kept in {options.out}; {again} goes on from there"
    return _run("dump", run, "is complete", kept)


#: Flags of `compare` that are parameters of the same name.
_COMPARED = (
    *("descriptors", "conditions", "classifiers", "protocol", "size", "train", "test", "patches"),
    *("repeats", "folds", "seed", "regions", "label_from", "truth_rule", "channel"),
    *("missing_value", "max_pixels", "jobs", "backend"),
)


def _compare(options: argparse.Namespace) -> int:
    def run() -> str:
        given = {name: getattr(options, name) for name in _COMPARED}
        arguments = {name: value for name, value in given.items() if value is not None}
        if options.features:
            features = dict(feature_value(text) for text in options.features)
            arguments["transformer"] = with_features(MinkowskiCurves(), features, "--set")
        if "" not in sys.path:
            sys.path.insert(0, "")  # modules of the current folder, for import paths
        found = compare(
            options.source, options.out, ablation=options.ablation, fresh=options.fresh, **arguments
        )
        print(f"mfeat compare: {verdict(found)}", file=sys.stderr)
        return f"{found.out}/{REPORT_HTML}"

    again = "the same command" + (" without --fresh" if options.fresh else "")
    kept = f"what is finished is kept in {options.out}; {again} goes on from there"
    return _run("compare", run, "is complete", kept)


def _printable(text: str) -> str:
    """Return text without the control characters that TOML forbids in comments."""
    return "".join(one if one.isprintable() else "?" for one in text)


def _dump_arguments(options: argparse.Namespace) -> dict[str, Any]:
    """Return the arguments of `dump` from the settings file and the flags, which go before it."""
    found = {} if options.settings is None else read_settings(options.settings)
    for name in KEYS:
        value = getattr(options, name)
        if value is not None:
            found[name] = value
    if options.features:
        features = dict(feature_value(text) for text in options.features)
        base = found.get("transformer", MinkowskiCurves())
        found["transformer"] = with_features(base, features, "--set")
    return found


def _run(command: str, work: Callable[[], str], done: str, left: str) -> int:
    """Do the work of a command and print its result; returns the exit code."""
    code = 0
    try:
        result = work()
    except RejectsFound as found:
        result, code = found.summary.out, 1
    except (
        *(ValueError, TypeError, FileNotFoundError, FileExistsError, NotADirectoryError),
        *(IsADirectoryError, OutputInUse, ImportError),
    ) as error:
        return _stopped(f"mfeat {command}: {error}", 2)
    except InputChanged as error:  # says itself what to do
        return _stopped(f"mfeat {command}: {error}", 3)
    except (OSError, RuntimeError) as error:
        return _stopped(f"mfeat {command}: {error}; {left}", 3)
    except KeyboardInterrupt:
        return _stopped(f"mfeat {command}: interrupted; {left}", 130)
    except Exception:  # a fault of ours must not look like exit code 1, rejects
        traceback.print_exc()
        return _stopped(f"mfeat {command}: stopped by an unforeseen error; {left}", 3)
    try:
        print(result, flush=True)
    except (OSError, UnicodeEncodeError) as error:
        sys.stdout = None  # so that Python does not try to flush it again on the way out
        what = f"{result} {done}, but " if done else ""
        return _stopped(f"mfeat {command}: {what}stdout failed: {error}", 3)
    return code


def _stopped(message: str, code: int) -> int:
    print(message, file=sys.stderr)
    return code
