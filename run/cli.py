"""The ``starfathom`` command. Every command imports what it needs when it runs, so that help is there at once.

Exit codes: 0 all done (a refusal is a result), 1 some inputs failed, 2 bad arguments or an unusable target table.
"""

from __future__ import annotations

import json
import math
import os
import sys
import textwrap
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer

from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError

if TYPE_CHECKING:
    from starfathom.classify.engine import Settings
    from starfathom.classify.spectrum import PlainSpectrum

app = typer.Typer(
    name="starfathom",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 110},
    help="MK types, distances and radii of stars from low-resolution optical spectra.",
    epilog="Exit codes: 0 all done (a refusal is a result), 1 some inputs failed, 2 bad arguments.",
)
templates_app = typer.Typer(
    no_args_is_help=True, rich_markup_mode=None, help="The reference library and your own standards."
)
app.add_typer(templates_app, name="templates")

#: Files read and classified at a time.
BATCH = 32
#: Up to this many stars get a block each on the terminal, more get a line each.
BLOCKS = 40


# Options that several commands share ---------------------------------------------------------------------------------

# mypy and typer read these as types, hence the capitals.
Air = Annotated[bool, typer.Option("--air", help="Wavelengths are in air, whatever the file says.")]
Vacuum = Annotated[bool, typer.Option("--vacuum", help="Wavelengths are in vacuum, whatever the file says.")]
Fwhm = Annotated[
    float | None, typer.Option(metavar="ANGSTROM", help="Width of the line spread; measured if not given.")
]
Without = Annotated[
    str, typer.Option("--without", metavar="LIB,LIB", help="Leave source libraries out of everything learned.")
]
WithoutStar = Annotated[
    str, typer.Option("--without-star", metavar="HIP,...", help="Leave stars out of everything learned.")
]
Velocity = Annotated[float | None, typer.Option(metavar="KMS", help="Velocity of the star; measured if not given.")]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON and nothing else.")]
Scale = Annotated[str | None, typer.Option(metavar="NAME", help="Luminosity scale; an unknown name lists them.")]
Prior = Annotated[str | None, typer.Option(metavar="NAME", help="Distance prior; an unknown name lists them.")]
Rv = Annotated[float | None, typer.Option("--rv", help="Fix the ratio of total to selective extinction.")]


def _medium(air: bool, vacuum: bool) -> str | None:
    if air and vacuum:
        raise RequestError("--air and --vacuum exclude each other; give one.")
    return "air" if air else "vacuum" if vacuum else None


def _names(text: str) -> tuple[str, ...]:
    return tuple(part.strip().lower() for part in text.split(",") if part.strip())


def _hips(text: str) -> tuple[int, ...]:
    out = []
    for part in _names(text):
        digits = part.removeprefix("hip").strip()
        if not digits.isdigit():
            raise RequestError(f"--without-star {text}: {part} is not a HIP number; give numbers such as 71683,8102.")
        out.append(int(digits))
    return tuple(out)


def _positive(value: float | None, option: str, unit: str) -> None:
    if value is not None and not (math.isfinite(value) and value > 0):
        raise RequestError(f"{option} {value:g}: must be above 0 ({unit}).")


def _settings(
    air: bool, vacuum: bool, fwhm: float | None, resolution: float | None, velocity: float | None
) -> Settings:
    from starfathom.classify.engine import Settings

    _positive(fwhm, "--fwhm", "angstrom")
    _positive(resolution, "--resolution", "wavelength over FWHM")
    if fwhm is not None and resolution is not None:
        raise RequestError("--fwhm and --resolution say the same thing; give one.")
    if velocity is not None and not abs(velocity) < 20000:
        raise RequestError(f"--velocity {velocity:g}: give km/s, below 20000.")
    return Settings(medium=_medium(air, vacuum), fwhm_angstrom=fwhm, resolution=resolution, velocity_kms=velocity)


def _say(text: str) -> None:
    """To standard output, whatever its encoding can show."""
    try:
        typer.echo(text)
    except UnicodeEncodeError:
        typer.echo(text.replace("Å", "A").replace("±", "+-").encode("ascii", "replace").decode())


def _say_json(value: Any) -> None:
    """JSON proper: NaN and infinities, which JSON lacks, become null."""
    typer.echo(json.dumps(_plain(value), ensure_ascii=False, indent=1))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value


# classify ------------------------------------------------------------------------------------------------------------


@app.command()
def classify(
    files: Annotated[list[str], typer.Argument(metavar="FILE...", help="Spectra in any usual format.")],
    output: Annotated[
        str | None,
        typer.Option("-o", "--output", metavar="TABLE", help="Write a table: .ecsv, .csv, .fits, .vot or .parquet."),
    ] = None,
    air: Air = False,
    vacuum: Vacuum = False,
    fwhm: Fwhm = None,
    resolution: Annotated[float | None, typer.Option(metavar="R", help="Resolving power, in place of --fwhm.")] = None,
    velocity: Velocity = None,
    read_as: Annotated[
        str | None,
        typer.Option(
            "--read-as",
            metavar="KIND",
            help="Read the files as this kind when guessing fails; an unknown kind lists them.",
        ),
    ] = None,
    without: Without = "",
    without_star: WithoutStar = "",
    as_json: AsJson = False,
) -> None:
    """Type spectra, with the evidence."""
    from starfathom.classify.engine import Classifier
    from starfathom.progress import Progress

    settings = _settings(air, vacuum, fwhm, resolution, velocity)
    if output is not None:
        _check_output(output)
    classifier = Classifier.load(without_libraries=_names(without), without_stars=_hips(without_star))
    rows: list[dict[str, Any]] = []
    told: list[dict[str, Any]] = []
    with Progress("spectra", len(files), wanted=not as_json) as bar:
        for start in range(0, len(files), BATCH):
            paths = files[start : start + BATCH]
            spectra = [_read(path, settings.medium, read_as) for path in paths]
            for path, answer in zip(paths, classifier.classify_many(spectra, settings)):
                row = answer.row() | {"file": path}
                rows.append(row)
                if as_json:
                    told.append(row | {"evidence": [_criterion(c) for c in answer.evidence]})
            bar.advance(len(paths))
    if as_json:
        _say_json(told)
    else:
        _say_stars(rows)
    if output is not None:
        from starfathom import __version__
        from starfathom.classify.assignment import COLUMNS
        from starfathom.tables import write_table

        write_table(output, rows, COLUMNS, {"made_by": f"starfathom {__version__}"})
        if not as_json:
            _say(f"Table written to {output}")
    if any(row["status"] == "failed" for row in rows):
        raise typer.Exit(1)


def _check_output(output: str) -> None:
    """Refuse an unusable output before the work, not after it."""
    from starfathom.tables import format_of

    format_of(output)
    folder = Path(output).resolve().parent
    if not folder.is_dir():
        raise RequestError(f"{output}: the folder {folder} does not exist; make it first.")


def _read(path: str, medium: str | None, read_as: str | None) -> PlainSpectrum | SpectrumError:
    from starfathom.classify.reading import read_plain

    try:
        return read_plain(path, medium=medium, read_as=read_as)
    except SpectrumError as fault:
        return fault


def _criterion(criterion: Any) -> dict[str, Any]:
    from dataclasses import asdict

    return asdict(criterion)


def _say_stars(rows: Sequence[dict[str, Any]], budgets: dict[str, list[dict[str, Any]]] | None = None) -> None:
    from starfathom import terminal

    width, colour = terminal.width_of(), terminal.colour_wanted()
    if len(rows) <= BLOCKS:
        said = terminal.common_cautions(rows)
        for row in rows:
            budget = (budgets or {}).get(str(row.get("name")), [])
            _say(terminal.star_block(row, budget, width=width, colour=colour, said=said) + "\n")
        if said:
            _say(textwrap.fill(f"For most of these stars: {' '.join(said)}", width) + "\n")
    else:
        for row in rows:
            _say(terminal.one_line(row, width=width, colour=colour))
    if len(rows) > 1:
        states = [row["status"] for row in rows]
        _say(
            terminal.summary({"rows": len(rows), "refused": states.count("refused"), "failed": states.count("failed")})
        )


# lines, sheet, desk --------------------------------------------------------------------------------------------------


@app.command()
def lines(
    file: Annotated[str, typer.Argument(metavar="FILE", help="A spectrum in any usual format.")],
    output: Annotated[
        str | None, typer.Option("-o", "--output", metavar="TABLE", help="Write a table, format by suffix.")
    ] = None,
    fwhm: Fwhm = None,
    air: Air = False,
    vacuum: Vacuum = False,
    velocity: Velocity = None,
    read_as: Annotated[
        str | None, typer.Option("--read-as", metavar="KIND", help="Read the file as this kind.")
    ] = None,
    reference: Annotated[
        bool, typer.Option("--reference", help="Measure by the slow calls the quick ones are held to.")
    ] = False,
    plot: Annotated[str | None, typer.Option("--plot", metavar="PICTURE", help="Draw the fits (.png, .pdf).")] = None,
    as_json: AsJson = False,
) -> None:
    """Measure the diagnostic lines."""
    from starfathom import lines_command

    _positive(fwhm, "--fwhm", "angstrom")
    if output is not None:
        _check_output(output)
    lines_command.run(
        file,
        output=output,
        fwhm_angstrom=fwhm,
        medium=_medium(air, vacuum),
        velocity_kms=velocity,
        read_as=read_as,
        reference=reference,
        plot=plot,
        as_json=as_json,
    )


@app.command()
def sheet(
    file: Annotated[str, typer.Argument(metavar="FILE", help="A spectrum in any usual format.")],
    with_type: Annotated[
        str | None, typer.Option("--with", metavar="TYPE", help='Compare with this type, such as "G2 V".')
    ] = None,
    output: Annotated[
        str | None, typer.Option("-o", "--output", metavar="PICTURE", help="File to draw: .png, .pdf or .svg.")
    ] = None,
    air: Air = False,
    vacuum: Vacuum = False,
    fwhm: Fwhm = None,
    velocity: Velocity = None,
) -> None:
    """Draw the evidence as a page to print."""
    from starfathom import sheet as page

    settings = _settings(air, vacuum, fwhm, None, velocity)
    page.run(
        file, with_type, output, medium=settings.medium, fwhm_angstrom=settings.fwhm_angstrom,
        velocity_kms=settings.velocity_kms,
    )  # fmt: skip


@app.command()
def desk(
    files: Annotated[list[str], typer.Argument(metavar="FILE...|RUN_DIR", help="Spectra, or the folder of a run.")],
    port: Annotated[int, typer.Option(help="Port on this machine; 0 takes a free one.")] = 0,
    no_browser: Annotated[bool, typer.Option("--no-browser", help="Only print the address.")] = False,
) -> None:
    """Check types by hand, in the browser."""
    from starfathom.desk import serve

    if not 0 <= port <= 65535:
        raise RequestError(f"--port {port}: give a number from 0 to 65535; 0 takes a free one.")
    serve(files, port, not no_browser)


# distance ------------------------------------------------------------------------------------------------------------


@app.command()
def distance(
    mk_type: Annotated[str, typer.Option("--type", metavar="TYPE", help='MK type, such as "A2 V".')],
    mag: Annotated[
        list[str] | None, typer.Option("--mag", metavar="BAND=MAG[,ERR]", help="A magnitude; repeat for more.")
    ] = None,
    parallax: Annotated[
        str | None, typer.Option(metavar="MAS,ERR", help="A measured parallax to compare with.")
    ] = None,
    ebv: Annotated[
        str | None, typer.Option(metavar="EBV,ERR", help="Reddening known from elsewhere, as a prior.")
    ] = None,
    ra: Annotated[float | None, typer.Option(help="Right ascension, degrees.")] = None,
    dec: Annotated[float | None, typer.Option(help="Declination, degrees.")] = None,
    scale: Scale = None,
    prior: Prior = None,
    rv: Rv = None,
    seed: Annotated[int, typer.Option(help="Seed of the samples.")] = 0,
    as_json: AsJson = False,
) -> None:
    """Distance and radius from type and magnitudes."""
    from dataclasses import asdict

    from starfathom import terminal
    from starfathom.chain import TYPE_GIVEN, given_type
    from starfathom.classify.mktype import MKType
    from starfathom.distance import Photometry, fathom

    _check_numbers(seed, rv)
    if (ra is None) != (dec is None):
        raise RequestError("--ra and --dec make a position together; give both, in degrees.")
    if ra is not None and dec is not None and not (math.isfinite(ra) and math.isfinite(dec)):
        raise RequestError(f"--ra {ra:g} --dec {dec:g}: is not on the sky; give degrees, ICRS.")
    magnitudes = dict(_magnitude(text) for text in mag or [])
    if not magnitudes:
        raise RequestError("--mag is missing: a distance needs at least one magnitude, such as --mag V=7.31,0.01.")
    if len(magnitudes) < len(mag or []):
        raise RequestError("--mag names a band twice; give each band once.")
    given = MKType.parse(mk_type)
    assignment = given_type(mk_type)
    if assignment.status != "typed":
        raise RequestError(assignment.reason)
    found = fathom(
        given,
        Photometry(magnitudes),
        parallax=_pair(parallax, "--parallax", "5.9,0.3"),
        ra_deg=ra,
        dec_deg=dec,
        ebv=_pair(ebv, "--ebv", "0.10,0.03"),
        scale=scale,
        prior=prior,
        rv=rv,
        seed=seed,
    )
    row = {"mk_type": str(given)} | dict(found.row())
    budget = [asdict(part) for part in found.budget]
    if as_json:
        _say_json(row | {"budget": budget, "cautions": list(found.cautions)})
        return
    block = {"name": "star", "flags": TYPE_GIVEN, "status": "typed"} | row
    _say(
        terminal.star_block(
            block | {"cautions": list(found.cautions)},
            budget,
            width=terminal.width_of(),
            colour=terminal.colour_wanted(),
        )
    )


def _magnitude(text: str) -> tuple[str, tuple[float, float] | float]:
    band, equals, rest = text.partition("=")
    if not equals:
        raise RequestError(f"--mag {text}: write band=magnitude,error, such as --mag V=7.31,0.01.")
    numbers = [_float(part, f"--mag {text}") for part in rest.split(",")]
    if len(numbers) > 2:
        raise RequestError(f"--mag {text}: a magnitude and its error are two numbers, not {len(numbers)}.")
    return band.strip(), (numbers[0], numbers[1]) if len(numbers) == 2 else numbers[0]


def _pair(text: str | None, option: str, example: str) -> tuple[float, float] | None:
    if text is None:
        return None
    numbers = [_float(part, f"{option} {text}") for part in text.split(",")]
    if len(numbers) != 2:
        raise RequestError(f"{option} {text}: give the value and its error, such as {option} {example}.")
    if not numbers[1] > 0:
        raise RequestError(f"{option} {text}: the error must be above 0.")
    return numbers[0], numbers[1]


def _float(text: str, where: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise RequestError(f"{where}: {text.strip() or 'nothing'} is not a number.") from None
    if not math.isfinite(value):
        raise RequestError(f"{where}: {text.strip()} is not a finite number.")
    return value


# run and demo --------------------------------------------------------------------------------------------------------


@app.command()
def run(
    targets: Annotated[str, typer.Argument(metavar="TARGETS", help="Target list: .ecsv, .csv, .fits or .parquet.")],
    output: Annotated[
        str, typer.Option("-o", "--output", metavar="RUN_DIR", help="Folder of the run.")
    ] = "starfathom_run",
    workers: Annotated[int | None, typer.Option(metavar="N", help="Processes; one a core if not given.")] = None,
    scheduler: Annotated[
        str | None, typer.Option(metavar="tcp://...", help="Work on this Dask cluster instead.")
    ] = None,
    resume: Annotated[bool, typer.Option("--resume", help="Finish the run in RUN_DIR, with its own settings.")] = False,
    seed: Annotated[int, typer.Option(metavar="N", help="Same seed, same result.")] = 0,
    scale: Scale = None,
    prior: Prior = None,
    rv: Rv = None,
    air: Air = False,
    vacuum: Vacuum = False,
    without: Without = "",
    without_star: WithoutStar = "",
    formats: Annotated[
        str,
        typer.Option(
            "--formats",
            metavar="ecsv,csv,...",
            help="Tables wanted: ecsv, csv, fits, vot, parquet; all of them if not given.",
        ),
    ] = "",
    no_report: Annotated[bool, typer.Option("--no-report", help="Only the tables, no HTML report.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress, no blocks.")] = False,
) -> None:
    """A list of stars, from spectra to distances."""
    from starfathom.chain import RunSettings
    from starfathom.targets import TargetList

    _check_numbers(seed, rv)
    settings = RunSettings(
        seed=seed,
        scale=scale,
        prior=prior,
        rv=rv,
        medium=_medium(air, vacuum),
        without_libraries=_names(without),
        without_stars=_hips(without_star),
    )
    _check_names(scale, prior)
    failed = _carry_out(
        TargetList(targets),
        output,
        settings,
        workers=workers,
        scheduler=scheduler,
        resume=resume,
        formats=_names(formats) or None,
        report=not no_report,
        quiet=quiet,
    )
    if failed:
        raise typer.Exit(1)


def _check_numbers(seed: int, rv: float | None) -> None:
    """What a run and a single distance both need of their numbers."""
    if seed < 0:
        raise RequestError(f"--seed {seed}: give a whole number from 0 up.")
    if rv is not None and not 2.0 <= rv <= 6.0:
        raise RequestError(f"--rv {rv:g}: is outside 2 to 6, where extinction curves are known.")


def _check_names(scale: str | None, prior: str | None) -> None:
    """Refuse an unknown scale or prior before a run begins, not star by star within it."""
    if scale is None and prior is None:
        return
    from starfathom.distance import prior_names, scale_names

    for value, option, known in ((scale, "--scale", scale_names()), (prior, "--prior", prior_names())):
        if value is not None and value not in known:
            raise RequestError(f"{option} {value}: no such name; known are {', '.join(known)}.")


def _carry_out(
    targets: Any,
    output: str,
    settings: Any,
    *,
    workers: int | None,
    scheduler: str | None,
    resume: bool,
    formats: Sequence[str] | None,
    report: bool,
    quiet: bool,
) -> int:
    from starfathom import terminal
    from starfathom.record import open_record
    from starfathom.survey import run_survey

    if targets.ignored_columns and not quiet:
        typer.echo(f"Columns not used: {', '.join(targets.ignored_columns)}", err=True)
    outcome = run_survey(
        targets,
        output,
        settings,
        workers=workers,
        scheduler=scheduler,
        resume=resume,
        formats=formats,
        progress=not quiet,
    )
    page = _write_report(outcome.run_dir) if report else None
    if not quiet:
        if outcome.rows <= BLOCKS:
            with open_record(outcome.run_dir) as record:
                budgets: dict[str, list[dict[str, Any]]] = {}
                for entry in record.budget():
                    budgets.setdefault(entry["name"], []).append(entry)
                _say_stars(list(record.rows()), budgets)
        else:
            _say(terminal.summary(outcome.counts()))
        _say(f"Tables: {outcome.files[0]}" + (f" and {len(outcome.files) - 1} more there" if outcome.files[1:] else ""))
        if page is not None:
            _say(f"Report: {page}")
    return outcome.failed


def _write_report(run_dir: Path) -> Path | None:
    from starfathom.report import write_report

    return write_report(run_dir)


@app.command()
def demo(
    output: Annotated[
        str, typer.Option("-o", "--output", metavar="RUN_DIR", help="Folder of the report.")
    ] = "demo_report",
) -> None:
    """The whole job on an invented observing run."""
    import shutil
    from importlib.resources import as_file, files

    from starfathom.chain import RunSettings
    from starfathom.record import RECORD_NAME
    from starfathom.targets import TargetList

    folder = Path(output)
    if (folder / RECORD_NAME).is_file():
        shutil.rmtree(folder)
    elif folder.exists() and any(folder.iterdir()):
        raise RequestError(f"{folder}: is there already and holds no run; choose another folder with -o.")
    with as_file(files("starfathom.demo_spectra")) as spectra:
        _say(
            "The demonstration: one night at an observatory that does not exist. Every spectrum is simulated from a "
            "real library star;\nthe story and the true answers are in demo_spectra/README.md.\n"
        )
        _carry_out(
            TargetList(spectra / "targets.ecsv"),
            output,
            RunSettings(),
            workers=None,
            scheduler=None,
            resume=False,
            formats=None,
            report=True,
            quiet=False,
        )


# plan and templates --------------------------------------------------------------------------------------------------


@app.command()
def plan(
    types: Annotated[
        str | None,
        typer.Option(
            "--types", metavar="TYPE,TYPE", help='Rival types, such as "G8 III,G8 V"; else the whole H-R diagram.'
        ),
    ] = None,
    fwhm: Annotated[
        float | None, typer.Option(metavar="ANGSTROM", help="Width of the line spread; 5 if not given.")
    ] = None,
    wave_range: Annotated[
        str | None, typer.Option("--range", metavar="LO-HI", help="Wavelengths observed, angstrom.")
    ] = None,
    want: Annotated[str, typer.Option(metavar="GOAL", help='"class", or such as "distance 15%".')] = "class",
    figure: Annotated[
        str | None, typer.Option("--figure", metavar="PICTURE", help="Draw it too: .png, .pdf or .svg.")
    ] = None,
    as_json: AsJson = False,
) -> None:
    """What S/N it would take, before the night."""
    from starfathom import advice

    _positive(fwhm, "--fwhm", "angstrom")
    advice.run_plan(types, fwhm_angstrom=fwhm, wave_range=wave_range, want=want, as_json=as_json, figure=figure)


@templates_app.command()
def coverage(as_json: AsJson = False) -> None:
    """Count the library's stars by type and class, and say where a result would be weak."""
    from starfathom import templates_command

    templates_command.coverage(as_json)


@templates_app.command()
def show(
    what: Annotated[str, typer.Argument(metavar="NAME|TYPE", help='A star, its HIP number, or a type such as "G2 V".')],
    figure: Annotated[str | None, typer.Option(metavar="PNG", help="Draw the spectra into this picture.")] = None,
) -> None:
    """List a library star, or the stars nearest to a type, with their sources."""
    from starfathom import templates_command

    templates_command.show(what, figure)


@templates_app.command()
def add(
    file: Annotated[str, typer.Argument(metavar="FILE", help="Spectrum of a standard.")],
    mk_type: Annotated[str, typer.Option("--type", metavar="TYPE", help='Its MK type, such as "K2 III".')],
    name: Annotated[str | None, typer.Option("--name", help="Its name; the file's if not given.")] = None,
    fwhm: Fwhm = None,
    air: Air = False,
    vacuum: Vacuum = False,
    learn: Annotated[bool, typer.Option("--learn", help="Train the models with it too (minutes, once).")] = False,
) -> None:
    """Add a standard taken with your own instrument."""
    from starfathom import templates_command

    _positive(fwhm, "--fwhm", "angstrom")
    templates_command.add(
        file, mk_type, name=name, fwhm_angstrom=fwhm, medium=_medium(air, vacuum), learn=learn
    )


@templates_app.command()
def check() -> None:
    """Verify the shipped library and models, and list labels that a star's parameters contradict."""
    from starfathom import templates_command

    templates_command.check()


# The door ------------------------------------------------------------------------------------------------------------


def version_text() -> str:
    """Name and version."""
    from starfathom import __version__

    return f"starfathom {__version__}"


@app.callback(invoke_without_command=True)
def _root(
    context: typer.Context,
    version: Annotated[bool, typer.Option("--version", help="Print the version and leave.")] = False,
) -> None:
    if version:
        typer.echo(version_text())
        raise typer.Exit()


def _stop(sentence: str, code: int) -> NoReturn:
    typer.echo(f"starfathom: {sentence}", err=True)
    sys.exit(code)


def main(arguments: Iterable[str] | None = None) -> None:
    """Run the command line; faults a user can cause end in one sentence and an exit code, never a traceback."""
    # Before the matrix library is loaded: one thread, so that results do not depend on the number of cores.
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    _guarded(lambda: app(None if arguments is None else list(arguments), prog_name="starfathom"))


def _guarded(call: Callable[[], Any]) -> None:
    try:
        call()
    except RequestError as fault:
        _stop(str(fault), 2)
    except StarfathomError as fault:
        _stop(str(fault), 1)
    except KeyboardInterrupt:
        _stop("stopped; a run can be finished with --resume.", 130)
    except BrokenPipeError:
        # Whoever read our output has gone (such as "| head"): nothing more to say, and no complaint at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except Exception as fault:
        if os.environ.get("STARFATHOM_DEBUG"):
            raise
        _stop(
            f"a fault of the program itself, not of your input: {type(fault).__name__}: {fault} "
            "(set STARFATHOM_DEBUG=1 to see where).",
            1,
        )


if __name__ == "__main__":
    main()
