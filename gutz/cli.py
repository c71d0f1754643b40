"""The command `gutz` and its subcommands.

In:  a scan file (TOML) and options.
Out: results on stdout, notes on stderr, files in the folder named with --out, and an exit code:
     0 done; 1 done, but some points are not to be trusted; 2 mistake in command line or file; 3 stored data
     unreadable; 4 output exists or is in use; 5 out of disk, memory or time; 70 internal error;
     130 / 143 stopped, progress saved.
The work is in `gutz.commands`, loaded when a command runs, so that --help answers at once.
"""

import os
import sys
import tempfile
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import click

from gutz import __version__, cache
from gutz.errors import GutzError

INTERNAL_ERROR = 70
INTERRUPTED = 130

_FILE = click.argument("file", type=click.Path(path_type=Path))
_SET = click.option(
    "--set",
    "overrides",
    multiple=True,
    metavar="KEY=VALUE",
    help="Change one setting: section.key=value. Repeatable.",
)
_AT = click.option(
    "--at",
    "at",
    multiple=True,
    metavar="AXIS=VALUE",
    help="Choose a point: a value for an axis of the file. Repeatable.",
)
_JSON = click.option("--json", "as_json", is_flag=True, help="Write JSON on stdout, and nothing else there.")
_QUIET = click.option("--quiet", is_flag=True, help="No notes and no progress.")
_FORCE = click.option("--force", is_flag=True, help="Replace what is in the output folder.")
_DEBUG = click.option("--debug", is_flag=True, help="Show the full traceback of an error.")


def _out(help_text: str) -> Callable[[Any], Any]:
    return click.option("--out", metavar="DIR", help=help_text)


def _example(text: str) -> str:
    """Help text that starts with something to run; \\b keeps click from joining its lines."""
    return f"\b\n{text}"


@click.group(
    help=_example(
        "Example: gutz scan scans/rubidium-cubic.toml\n\n"
        "Phase diagrams, temperatures and entropies of two-species bosons in optical lattices.\n\n"
        "Every command reads the same kind of file; scans/README.md explains it."
    ),
    context_settings={"help_option_names": ["-h", "--help"]},
)
@click.version_option(__version__, "--version", message="gutz %(version)s")
def cli() -> None:
    """Collect the commands."""


@cli.command(
    short_help="Hubbard parameters from laser light and atoms.",
    help=_example(
        "Example: gutz lattice scans/rubidium-cubic.toml\n\n"
        "Hubbard parameters of the file's lattice, against its depth or scattering length.\n\n"
        "With --out, a figure as well (PNG and PDF)."
    ),
)
@_FILE
@_SET
@_AT
@click.option("--unit", default="Hz", show_default=True, help="Unit of energy: Hz, kHz, nK, E_R or U1.")
@_out("Write a figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def lattice(**options: Any) -> int:
    """Hubbard parameters."""
    from gutz.commands import lattice as command

    return command.run(**options)


@cli.command(
    short_help="Solve one point and print everything about it.",
    help=_example(
        "Example: gutz solve scans/rubidium-cubic.toml --at depth=12 --at T=5\n\n"
        "Solve one point, and print everything known about it.\n\n"
        "Axes of the file need a value each; it need not lie on the scan's grid."
    ),
)
@_FILE
@_SET
@_AT
@_JSON
@_QUIET
@_DEBUG
def solve(**options: Any) -> int:
    """One point."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import solve as command

    return command.run(**options)


@cli.command(
    short_help="Solve a whole grid of points, save and draw it.",
    help=_example(
        "Example: gutz scan scans/rubidium-cubic.toml --out rubidium\n\n"
        "Solve every point of the file's axes; save the numbers and figures (PNG and PDF).\n\n"
        "Ctrl-C stops after the chunk at work; the same command with --resume continues."
    ),
)
@_FILE
@_SET
@_out("Folder for the results [default: the file's name].")
@click.option("--resume", is_flag=True, help="Continue a run that was stopped.")
@click.option("--netcdf", is_flag=True, help="Also write one netCDF file, data.nc.")
@click.option("--adaptive", is_flag=True, help="Solve only where phases change, fill the rest; writes adaptive.nc.")
@click.option(
    "--nodes",
    type=click.IntRange(2),
    metavar="N",
    help="With --adaptive: points of the coarse grid along the first two axes [default: 17].",
)
@click.option("--estimate", is_flag=True, help="Print points, chunks, time and size, and stop there.")
@click.option(
    "--workers",
    type=click.IntRange(0, 1024),
    metavar="N",
    help="Processes that compute; 0: this one [default: one per core where it pays].",
)
@click.option("--scheduler", metavar="ADDRESS", help="Compute on a Dask cluster, for example tcp://10.0.0.1:8786.")
@click.option(
    "--chunk-limit",
    type=click.FloatRange(min=1.0),
    metavar="SECONDS",
    help="Give up a chunk after this long [default: an hour, and 20 times what is expected].",
)
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def scan(**options: Any) -> int:
    """A whole scan."""
    if options.pop("estimate"):
        from gutz.commands import check as judge

        names = ("file", "overrides", "as_json", "quiet", "debug")
        return judge.run(**{name: options[name] for name in names})
    if not options.pop("adaptive"):
        if options.pop("nodes"):
            raise click.UsageError("--nodes goes with --adaptive")
    elif options.pop("netcdf"):
        raise click.UsageError("--netcdf does not go with --adaptive, which writes adaptive.nc anyway")
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import scan as command

    return command.run_adaptive(**options) if "nodes" in options else command.run(**options)


@cli.command(
    short_help="Trace phase boundaries as curves.",
    help=_example(
        "Example: gutz boundary scans/counterflow-cubic.toml\n\n"
        "Trace the boundaries between phases over the ranges of two axes, each point to one part in a million.\n\n"
        "Writes boundary.nc and a figure; over a run of the same file in the folder, its phase figure as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option("--axes", nargs=2, metavar="X Y", help="Axes along x and y [default: the first two without --at].")
@click.option("--nodes", default=17, show_default=True, help="Points of the coarse grid along each axis.")
@click.option(
    "--straightness",
    default=1e-3,
    show_default=True,
    help="Farthest a curve may lie from the lines drawn, as a fraction of the axes.",
)
@_out("Folder for the results [default: the file's name].")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def boundary(**options: Any) -> int:
    """Phase boundaries."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import boundary as command

    return command.run(**options)


@cli.command(
    short_help="Clouds in a trap: shells, temperature, loading.",
    help=_example(
        "Example: gutz cloud scans/rubidium-cloud.toml --at depth=14\n\n"
        "Clouds with the atom numbers and entropy of the file's [trap]: shells, temperature, heating margin.\n\n"
        "Axes without --at are run through, for example the depth: the loading curve. With --out, figures as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option("--sites", is_flag=True, help="Also solve the cloud site by site, to check local density.")
@_out("Write numbers (netCDF) and figures (PNG and PDF) into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def cloud(**options: Any) -> int:
    """Clouds in a trap."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import cloud as command

    return command.run(**options)


@cli.command(
    short_help="Critical temperature and entropy, along an axis.",
    help=_example(
        "Example: gutz critical scans/counterflow-cubic.toml --order antipair\n\n"
        "Critical temperature and entropy per particle of pairs, anti-pairs or single atoms.\n\n"
        "Runs along the one axis without a value (temperatures do not count). With --out, a figure as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option(
    "--order", type=click.Choice(["single", "pair", "antipair"]), default="antipair", show_default=True,
    help="What orders: single atoms (superfluid), pairs (paired), anti-pairs (counterflow).",
)  # fmt: skip
@_out("Write critical.nc and a figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def critical(**options: Any) -> int:
    """Critical temperature."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import critical as command

    return command.run(**options)


@cli.command(
    short_help="One point from tubes to planes to the cube.",
    help=_example(
        "Example: gutz ladder scans/counterflow-cubic.toml --at t=0.02 --at T=0.01\n\n"
        "One point with hopping switched on along x, y and z in turn, product beside dressed.\n\n"
        "Axes of the file need a value each; the hopping is that along x. With --out, a figure as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option("--steps", default=5, show_default=True, help="Rungs from one whole dimension to the next.")
@_out("Write a figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def ladder(**options: Any) -> int:
    """Ladder of dimensions."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import ladder as command

    return command.run(**options)


@cli.command(
    short_help="What the noise picture of a point shows.",
    help=_example(
        "Example: gutz noise scans/counterflow-cubic.toml --at t=0.02 --at T=0.001 --size 16\n\n"
        "Noise correlations of momenta at one point: peaks and lines, what each means, how far to trust them.\n\n"
        "Axes of the file need a value each. With --out, the maps (netCDF) and a figure as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option("--size", default="32", show_default=True, metavar="SITES", help="Sites per direction: 32, or 64x64x16.")
@click.option("--log", is_flag=True, help="Logarithmic scales in the figure.")
@_out("Write noise.nc and a figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def noise(**options: Any) -> int:
    """Noise correlations."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import noise as command

    return command.run(**options)


@cli.command(
    short_help="How many shots a peak needs, and how cold it must be.",
    help=_example(
        "Example: gutz detect scans/counterflow-detection.toml --at depth=16\n\n"
        "Shots for the pair or counterflow peak of the file's [imaging] camera, against temperature and entropy.\n\n"
        "Axes that are neither temperature nor camera need a value each. With --out, numbers and a figure as well."
    ),
)
@_FILE
@_SET
@_AT
@click.option(
    "--improve", metavar="KNOBS",
    help="Move settings within bounds to need fewer shots: depth,tof=5:25. Bounds also come from the file's axes.",
)  # fmt: skip
@click.option("--tell", is_flag=True, help="Which peak tells the candidate phases at a point apart.")
@click.option("--shots-out", metavar="FILE", help="Write synthetic pictures of the coldest point (.nc, HDF5).")
@click.option("--pictures", default=100, show_default=True, help="How many synthetic pictures of each species.")
@click.option("--side", default=256, show_default=True, help="Pixels along a side of a synthetic picture.")
@click.option("--seed", default=0, show_default=True, help="Of the synthetic pictures.")
@_out("Write detect.nc and a figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def detect(**options: Any) -> int:
    """Detectability."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import detect as command

    return command.run(**options)


@cli.command(
    short_help="Check a file and estimate the work.",
    help=_example(
        "Example: gutz check scans/rubidium-cubic.toml\n\n"
        "Check a file and estimate the work: points, chunks, memory, disk, time. Computes nothing."
    ),
)
@_FILE
@_SET
@_JSON
@_QUIET
@_DEBUG
def check(**options: Any) -> int:
    """Check and estimate."""
    from gutz.commands import check as command

    return command.run(**options)


@cli.command(
    short_help="Where mean field can be believed in one dimension.",
    help=_example(
        "Example: gutz compare\n\n"
        "Set mean field beside quasi-exact chains: the stored set, --entry NAME, a point of a scan FILE, or the FOLDER "
        "of a finished run.\n\n"
        "Exit code 1: some point is wrong with every ansatz, or has no reference nearby."
    ),
)
@click.argument("target", required=False, type=click.Path(path_type=Path), metavar="[FILE|FOLDER]")
@_SET
@_AT
@click.option("--entry", multiple=True, metavar="NAME", help="A stored chain, see gutz reference list. Repeatable.")
@click.option("--references", type=click.Path(path_type=Path), help="Another file of reference entries.")
@_out("Write the comparison (netCDF) and its figure into this folder.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def compare(**options: Any) -> int:
    """Compare with references."""
    _load_numerics(quiet=options["quiet"])
    from gutz.commands import compare as command

    return command.run(**options)


@cli.group(
    short_help="Quasi-exact chains that mean field is judged by.",
    help=_example(
        "Example: gutz reference list\n\n"
        "Quasi-exact one-dimensional chains, stored: the measure of gutz compare. docs/compare.md explains them."
    ),
)
def reference() -> None:
    """Collect the commands on references."""


_STORE = click.option("--file", "file", type=click.Path(path_type=Path), help="Another file of reference entries.")


@reference.command(
    "make",
    short_help="Make the entries of a plan; takes minutes each.",
    help=_example(
        "Example: gutz reference make gutz/data/references-plan.toml --out my-references\n\n"
        "Solve the chains a plan lists, and save each as soon as it is done. Started again, it continues."
    ),
)
@_FILE
@_out("Folder for references.nc [default: the plan's name].")
@click.option("--only", multiple=True, metavar="NAME", help="Make this entry only. Repeatable.")
@_JSON
@_QUIET
@_FORCE
@_DEBUG
def reference_make(**options: Any) -> int:
    """Make entries."""
    from gutz.commands import reference as command

    return command.run_make(**options)


@reference.command(
    "list",
    short_help="What is stored, and how good it is.",
    help=_example("Example: gutz reference list\n\nEvery stored entry, with its sizes and errors."),
)
@_STORE
@_JSON
@_DEBUG
def reference_list(**options: Any) -> int:
    """List entries."""
    from gutz.commands import reference as command

    return command.run_list(**options)


@reference.command(
    "verify",
    short_help="Recompute a small entry and compare.",
    help=_example(
        "Example: gutz reference verify\n\n"
        "Solve the shortest chain of an entry again (a random small one without NAME) and compare every number."
    ),
)
@click.argument("name", required=False)
@_STORE
@click.option("--seed", type=int, help="Of the random choice.")
@_JSON
@_DEBUG
def reference_verify(**options: Any) -> int:
    """Verify an entry."""
    from gutz.commands import reference as command

    return command.run_verify(**options)


def _load_numerics(quiet: bool) -> None:
    """Load jax, with its cache of compiled code and 64-bit numbers switched on."""
    problem = cache.enable()
    if problem and not quiet:
        click.echo(f"note: {problem}", err=True)
    # First of the numerics: it reads the environment before jax does, and refuses 32 bits in one sentence.
    from gutz import precision

    precision.check_double()


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and exit; the one door at which every error becomes words and a code."""
    given = list(sys.argv[1:] if arguments is None else arguments)
    sys.exit(_run(given))


def _run(given: list[str]) -> int:
    try:
        return int(cli.main(given, prog_name="gutz", standalone_mode=False) or 0)
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message())
        return 0
    except click.UsageError as error:
        where = error.ctx.command_path if error.ctx else "gutz"
        _say(f"{error.format_message()}\nSee: {where} --help")
        return 2
    except (KeyboardInterrupt, click.exceptions.Abort):
        _say("stopped")
        return INTERRUPTED
    except GutzError as error:
        if "--debug" in given:
            traceback.print_exc()
        _say(str(error))
        return error.exit_code
    except SystemExit:
        # What click and rich do when the reader of our output has gone: no mistake, and no result to speak of.
        # What is still buffered must not raise again at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        if "--debug" in given:
            traceback.print_exc()
        _say(_report_internal(error))
        return INTERNAL_ERROR


def _say(words: str) -> None:
    click.echo(f"gutz: {words}", err=True)


def _report_internal(error: Exception) -> str:
    """Save the traceback in a file of its own, and say where."""
    kind = type(error).__name__
    try:
        handle, name = tempfile.mkstemp(prefix="gutz-error-", suffix=".txt")
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(f"gutz {__version__}\n")
            traceback.print_exception(error, file=file)
    except OSError:
        return f"internal error ({kind}); run again with --debug to see where, and please report it"
    return f"internal error ({kind}); please report it with the file {name}"


if __name__ == "__main__":
    main()
