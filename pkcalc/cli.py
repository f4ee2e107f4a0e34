"""The command line. Results on stdout, errors on stderr; exit status 0 done, 1 a stop, 2 input not readable."""

from __future__ import annotations

import os
import sys
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from pkcalc import __version__

if TYPE_CHECKING:
    from pkcalc.case import Case, CaseFile
    from pkcalc.consult import Consult
    from pkcalc.errors import CannotEstimate, CaseError, DrugFileError

FORMATS = ("text", "json")
NOTE_FORMATS = (*FORMATS, "html", "pdf")
FORECASTS = ("population", "one-level", "two-level", "whole-record")


def main() -> None:
    """Entry point: keeps tracebacks, and with them patient data, off the screen."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    try:
        cli.main(standalone_mode=False)
    except click.exceptions.Exit as stop:
        sys.exit(stop.exit_code)
    except click.ClickException as error:
        _usage_error(error)
    except click.exceptions.Abort:
        click.echo("Interrupted.", err=True)
        sys.exit(2)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except Exception as error:  # the last door: any fault ends here, without numbers
        _crash(error)


def _asked_for_json() -> bool:
    words = sys.argv[1:]
    return "--format=json" in words or ("--format", "json") in pairwise(words)


def _usage_error(error: click.ClickException) -> None:
    if _asked_for_json():
        problem = {
            "where": "Command line",
            "given": error.format_message(),
            "allowed": "",
            "fix": "See pkcalc --help",
        }
        _print_json({"pkcalc_note": 1, "outcome": "input error", "problems": [problem], "version": __version__})
    else:
        error.show()
    sys.exit(2)


def _crash(error: Exception) -> None:
    from pkcalc.errors import CannotEstimate, CaseError, DrugFileError

    if isinstance(error, (CaseError, CannotEstimate, DrugFileError)):
        fail(error, _asked_for_json())
    message = f"The calculation stopped ({type(error).__name__}). No number was given. Please report this fault."
    if _asked_for_json():
        _print_json({"pkcalc_note": 1, "outcome": "fault", "message": message, "version": __version__})
    click.echo(message, err=True)
    sys.exit(1)


def _print_json(data: dict[str, Any]) -> None:
    from pkcalc.note.data import dumps

    click.echo(dumps(data), nl=False)


def fail(error: CaseError | CannotEstimate | DrugFileError, as_json: bool) -> None:
    """Print an input error (status 2) or a refusal (status 1) and leave."""
    from pkcalc.errors import CaseError, DrugFileError

    if isinstance(error, DrugFileError):
        if as_json:
            problem = {
                "where": "Drug or site file",
                "given": str(error),
                "allowed": "",
                "fix": "Correct the file",
            }
            _print_json({"pkcalc_note": 1, "outcome": "input error", "problems": [problem], "version": __version__})
        else:
            click.echo(str(error), err=True)
        sys.exit(2)
    if as_json:
        from pkcalc.note.data import failure_data

        _print_json(failure_data(error))
    elif isinstance(error, CaseError):
        click.echo("The input must be mended first:", err=True)
        for found in error.problems:
            click.echo(f"- {found.text}", err=True)
    else:
        click.echo(f"No answer: {error}", err=True)
    sys.exit(2 if isinstance(error, CaseError) else 1)


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="pkcalc")
def cli() -> None:
    """Dosing of drugs with saturable elimination, for clinical pharmacists.

    Supports, and never replaces, the local protocol and licensed pharmacists and physicians. Active status
    epilepticus is treated by protocol now; acute overdose belongs to the poison centre.
    """


def _write(case: Case, output_format: str, out: Path | None, site: Path | None, keep: Path | None = None) -> None:
    from pkcalc.consult import run_consult

    if output_format == "pdf" and out is None:
        raise click.UsageError("A PDF is written to a file: add --out FILE")
    consult = run_consult(case, site)
    note = _printed(consult, output_format)
    if out is None:
        click.echo(note, nl=False)
    else:
        if isinstance(note, bytes):
            out.write_bytes(note)
        else:
            out.write_text(note, encoding="utf-8")
        click.echo(f"Written: {out}", err=True)
    if keep is not None:
        from pkcalc.note.followup import with_forecasts

        _write_new(keep, with_forecasts(consult))
    if consult.stopped:
        if output_format != "json" or out is not None:
            click.echo("Stopped: see the stops at the top of the note for the reason.", err=True)
        sys.exit(1)


def _printed(consult: Consult, output_format: str) -> str | bytes:
    if output_format == "json":
        from pkcalc.note.data import dumps, note_data

        return dumps(note_data(consult))
    if output_format == "html":
        from pkcalc.note.html import render_html

        return render_html(consult)
    if output_format == "pdf":
        from pkcalc.note.pdf import render_pdf

        return render_pdf(consult)
    from pkcalc.note.document import compose
    from pkcalc.note.text import render

    return render(compose(consult))


_format = click.option("--format", "output_format", type=click.Choice(FORMATS), default="text", show_default=True)
_note_format = click.option(
    "--format", "output_format", type=click.Choice(NOTE_FORMATS), default="text", show_default=True
)
_out = click.option("--out", type=click.Path(path_type=Path, dir_okay=False), help="Write to this file.")
_site = click.option(
    "--site",
    type=click.Path(path_type=Path, exists=True, dir_okay=False),
    help="The hospital's own settings.",
)


@cli.command()
@click.argument("case_file", metavar="CASE", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.option(
    "--plan",
    "plan_settings",
    multiple=True,
    metavar="KEY=VALUE",
    help="In place of the case's own: shelf, products, aim, largest-step, order-by-loss, load, load-route, load-aim, "
    'load-at, restart-level, start. For example --plan shelf=united-states --plan "aim=15 mg/L".',
)
@click.option(
    "--keep",
    type=click.Path(path_type=Path, dir_okay=False),
    metavar="NEW",
    help="Write the case with the levels that the note forecasts to this new file: add a level to it later, and its "
    "note says whether what came lay inside. A file that exists is never overwritten.",
)
@_note_format
@_out
@_site
def note(
    case_file: Path,
    plan_settings: tuple[str, ...],
    keep: Path | None,
    output_format: str,
    out: Path | None,
    site: Path | None,
) -> None:
    """A case file in, a consult note out."""
    from pkcalc.case import load_case
    from pkcalc.plan.asked import with_settings

    case = load_case(case_file)
    if keep is not None:
        _refuse_existing(keep)
    _write(with_settings(case, plan_settings) if plan_settings else case, output_format, out, site, keep)


@cli.command()
@click.option("--drug", default="phenytoin", show_default=True, help="A drug of `pkcalc drugs`.")
@click.option("--form", "forms", multiple=True, required=True, help="Salt or product: once, or once per dose.")
@click.option(
    "--dose",
    "doses",
    multiple=True,
    required=True,
    help='For example "300 mg/day", or "7 g/h" or "110 mg/kg/h" for a drug told by the hour; repeat per pair.',
)
@click.option("--level", "levels", multiple=True, required=True, help='For example "8 mg/L"; in the same order.')
@click.option("--kind", type=click.Choice(["total", "free", "normalised"]), default="total", show_default=True)
@click.option("--weight", default="", help='For example "70 kg".')
@click.option("--age", default="", help='For example "45 years".')
@click.option("--albumin", default="", help='For example "29 g/L".')
@click.option("--aim", default="", help='Level aimed at, for example "15 mg/L".')
@click.option("--propose", "proposed", multiple=True, help='A dose to preview, for example "330 mg/day" or "8 g/h".')
@click.option("--product", default="", help="The liquid product that doses in mL/h are of.")
@click.option("--population", default="", help="A named population of the drug, where one must be chosen.")
@click.option("--shelf", default="", help="A generic country shelf of the drug, for a table of doses it can make.")
@_format
@_out
@_site
def pair(
    drug: str,
    forms: tuple[str, ...],
    doses: tuple[str, ...],
    levels: tuple[str, ...],
    kind: str,
    weight: str,
    age: str,
    albumin: str,
    aim: str,
    proposed: tuple[str, ...],
    product: str,
    population: str,
    shelf: str,
    output_format: str,
    out: Path | None,
    site: Path | None,
) -> None:
    """Vmax and Km from steady dose/level pairs typed on the command line.

    Results are told by the day, or by the hour for a drug told by the hour.
    """
    case = case_of_pairs(
        drug=drug,
        forms=forms,
        doses=doses,
        levels=levels,
        kind=kind,
        weight=weight,
        age=age,
        albumin=albumin,
        aim=aim,
        proposed=proposed,
        product=product,
        population=population,
        shelf=shelf,
    )
    if output_format == "text" and out is None:
        click.echo(f"Drug: {drug}. Levels read as {kind}. Each dose and level pair up in the order given.\n")
    _write(case, output_format, out, site)


def case_of_pairs(
    *,
    drug: str,
    forms: tuple[str, ...],
    doses: tuple[str, ...],
    levels: tuple[str, ...],
    kind: str,
    weight: str = "",
    age: str = "",
    albumin: str = "",
    aim: str = "",
    proposed: tuple[str, ...] = (),
    product: str = "",
    population: str = "",
    shelf: str = "",
) -> Case:
    """Pairs as typed -> checked case, every problem at once."""
    from pkcalc.case import AlbuminFile, CaseFile, DoseFile, LevelFile, PatientFile, PlanFile, ProposedFile, check_case
    from pkcalc.errors import CaseError, Problem

    problems: list[Problem] = []
    if len(doses) != len(levels):
        problems.append(
            Problem(
                "Doses and levels",
                f"{len(doses)} doses and {len(levels)} levels were given",
                "as many levels as doses",
                "Give one --level for every --dose",
            )
        )
    if len(forms) not in (1, len(doses)):
        problems.append(
            Problem(
                "Form",
                f"{len(forms)} forms were given",
                f"1 or {len(doses)}",
                "Give one form, or one per dose",
            )
        )
    if problems:
        raise CaseError(problems)
    per_dose = forms * len(doses) if len(forms) == 1 else forms
    rows = tuple(
        DoseFile(form=form, **_dose_fields(drug, form, product, dose, f"Dose {i + 1}", problems))
        for i, (dose, form) in enumerate(zip(doses, per_dose, strict=True))
    )
    wanted = tuple(
        ProposedFile(
            form=per_dose[-1], **_dose_fields(drug, per_dose[-1], product, p, f"Proposed dose {i + 1}", problems)
        )
        for i, p in enumerate(proposed)
    )
    if problems:
        raise CaseError(problems)
    return check_case(
        CaseFile(
            pkcalc_case=1,
            drug=drug,
            patient=PatientFile(weight=weight, age=age),
            albumin=AlbuminFile(value=albumin) if albumin else None,
            doses=rows,
            levels=tuple(LevelFile(value=v, kind=kind, on_dose=i + 1) for i, v in enumerate(levels)),
            aim=aim,
            proposed=wanted,
            population=population,
            plan=PlanFile(shelf=shelf),
        )
    )


def _dose_fields(drug: str, form: str, product: str, text: str, where: str, problems: list[Any]) -> dict[str, str]:
    """A steady dose as typed: the rate of an infusion for a drug told by the hour, else the amount of one day."""
    from pkcalc.drugs.profile import drug_names, load_profile

    profile = load_profile(drug) if drug in drug_names() else None
    known = profile.forms.get(form) if profile is not None and profile.time_unit == "h" else None
    if known is not None and known.absorption is None:
        return {"rate": text, "product": product}
    return {"amount": _amount_of_rate(text, where, problems), "every": "24 h"}


def _amount_of_rate(text: str, where: str, problems: list[Any]) -> str:
    """'300 mg/day' -> '300 mg', the amount of one daily dose, exactly as typed."""
    from pkcalc import units
    from pkcalc.errors import CaseError

    try:
        typed = units.read(text, "dose rate", where, only=("mg/day", "g/day", "mg PE/day"))
    except CaseError as error:
        problems.extend(error.problems)
        return ""
    number, label = units.split_label(text)
    return f"{number} {label.removesuffix('/day')}" if typed else ""


@cli.command()
@click.argument("name", required=False)
@_note_format
@_out
def demo(name: str | None, output_format: str, out: Path | None) -> None:
    """List the demonstration cases, or write the note of one."""
    from pkcalc.demos import demonstration, demonstrations

    if name is None:
        if output_format == "json":
            _print_json({"demonstrations": [{"name": d.name, "title": d.title} for d in demonstrations()]})
            return
        for entry in demonstrations():
            click.echo(f"{entry.name:<24} {entry.title}")
        click.echo("\nAll are invented and not for clinical use. Write the note of one: pkcalc demo NAME")
        return
    _write(demonstration(name), output_format, out, None)
    if output_format == "text" and out is None:
        click.echo("To open the form on this machine: pkcalc form", err=True)


@cli.command()
@click.argument("name", required=False)
@click.option("--format", "output_format", type=click.Choice(FORMATS), default="text")
def drugs(name: str | None, output_format: str) -> None:
    """What is known about a drug, and where each number comes from."""
    from pkcalc.drugs.profile import describe, drug_names, load_profile
    from pkcalc.errors import CaseError, Problem

    if name is None:
        known = [(n, load_profile(n)) for n in drug_names()]
        if output_format == "json":
            _print_json({"drugs": [{"name": n, "scope": p.scope} for n, p in known]})
            return
        for n, profile in known:
            click.echo(f"{n:<16} {profile.scope}")
        return
    if name not in drug_names():
        raise CaseError(Problem("Drug", f'"{name[:40]}" was given', ", ".join(drug_names()), "Choose one of these"))
    lines = describe(load_profile(name))
    if output_format == "json":
        _print_json({"drug": name, "lines": list(lines)})
    else:
        click.echo("\n".join(lines))


@cli.command()
@click.option("--note", "of_note", is_flag=True, help="Of the JSON note instead.")
def schema(of_note: bool) -> None:
    """The JSON Schema of the case file."""
    from pkcalc.case import case_schema

    if of_note:
        from pkcalc.note.schema import note_schema

        _print_json(note_schema())
        return
    _print_json(case_schema())


@cli.command()
@click.option("--port", type=click.IntRange(1, 65535), default=8501, show_default=True, help="Port on this machine.")
@_site
@click.option("--address", default="127.0.0.1", show_default=True, help="Another address needs sign-in.")
@click.option(
    "--without-sign-in",
    count=True,
    help="Show the form to other machines without sign-in; counts only when given twice.",
)
def form(port: int, site: Path | None, address: str, without_sign_in: int) -> None:
    """Start the form on this machine only."""
    from importlib.util import find_spec

    spec = find_spec("pkcalc_form")
    if spec is None or spec.origin is None:
        raise click.ClickException("The form is not installed.")
    folder = Path(spec.origin).parent
    if site is not None:
        from pkcalc.site import load_site

        load_site(site)  # a fault in it is told here, not on the page
        os.environ["PKCALC_SITE"] = str(site.resolve())
    here = address in ("127.0.0.1", "localhost", "::1")
    if not here and not _sign_in_is_set_up(folder):
        if without_sign_in < 2:
            raise click.UsageError(
                f"The form is not shown at {address} without sign-in: set up the hospital's own sign-in first, or "
                "leave --address out. To show it all the same, give --without-sign-in twice."
            )
        os.environ["PKCALC_WITHOUT_SIGN_IN"] = "yes, and told twice"
    where = "on this machine only" if here else "to every machine that reaches this address"
    click.echo(f"The form opens at http://{address}:{port} {where}. Stop it with Ctrl+C.", err=True)
    command = [sys.executable, "-m", "streamlit", "run", str(folder / "page.py")]
    command += ["--server.port", str(port), "--server.address", address]
    os.chdir(folder)
    os.execv(sys.executable, command)


def _sign_in_is_set_up(folder: Path) -> bool:
    """True where a secrets file with an [auth] part lies beside the page or in the home folder."""
    import tomllib

    for place in (folder / ".streamlit" / "secrets.toml", Path.home() / ".streamlit" / "secrets.toml"):
        try:
            found = tomllib.loads(place.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            continue
        if found.get("auth", {}).get("client_id"):
            return True
    return False


# --- cases from elsewhere, and a second person's entry ---------------------------------------------------


@cli.command("from-fhir")
@click.argument("bundle", metavar="BUNDLE", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.option("--drug", default="phenytoin", show_default=True, help="A drug of `pkcalc drugs`.")
@click.option(
    "--product",
    "products",
    multiple=True,
    metavar="PRODUCT=FORM",
    help="Your answer to which form a product is, by its code or text in the bundle; repeat per product.",
)
@_format
@_out
def from_fhir(bundle: Path, drug: str, products: tuple[str, ...], output_format: str, out: Path | None) -> None:
    """A FHIR R4 bundle in, a case file out, with a list of what was not understood."""
    from pkcalc.case import dump_case_file
    from pkcalc.errors import CaseError, Problem
    from pkcalc.fhir import load_bundle

    named: dict[str, str] = {}
    for given in products:
        product, mark, form_name = given.rpartition("=")
        if not mark or not product:
            raise CaseError(Problem("--product", f'"{given[:40]}" was given', "PRODUCT=FORM", "Put = between the two"))
        named[product] = form_name
    found = load_bundle(bundle, drug=drug, products=named)
    text = dump_case_file(found.file)
    if out is not None:
        out.write_text(text, encoding="utf-8")
    if output_format == "json":
        case = found.file.model_dump(mode="json", by_alias=True, exclude_defaults=True)
        _print_json({"pkcalc_import": 1, "version": __version__, **found.as_dict(), "case": case})
        return
    click.echo(found.report(), err=True, nl=False)
    if out is None:
        click.echo(text, nl=False)
    else:
        click.echo(f"Written: {out}", err=True)


def _print_columns(context: click.Context, _: click.Parameter, asked: bool) -> None:
    if asked:
        from pkcalc.spreadsheet import COLUMNS

        click.echo(COLUMNS, nl=False)
        context.exit()


@cli.command("from-csv")
@click.argument("doses", metavar="DOSES", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.argument("levels", metavar="LEVELS", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.option("--drug", default="phenytoin", show_default=True, help="A drug of `pkcalc drugs`.")
@click.option("--weight", default="", help='For example "70 kg".')
@click.option("--age", default="", help='For example "45 years".')
@click.option(
    "--columns", is_flag=True, is_eager=True, expose_value=False, callback=_print_columns, help="List the columns."
)
@_format
@_out
def from_csv(doses: Path, levels: Path, drug: str, weight: str, age: str, output_format: str, out: Path | None) -> None:
    """Two CSV files in, doses and levels, a case file out."""
    from pkcalc.case import dump_case_file
    from pkcalc.spreadsheet import load_pair

    file = load_pair(doses, levels, drug=drug, patient={"weight": weight, "age": age})
    if out is not None:
        out.write_text(dump_case_file(file), encoding="utf-8")
        click.echo(f"Written: {out}", err=True)
    if output_format == "json":
        case = file.model_dump(mode="json", by_alias=True, exclude_defaults=True)
        _print_json({"pkcalc_import": 1, "version": __version__, "ready": True, "case": case})
    elif out is None:
        click.echo(dump_case_file(file), nl=False)


@cli.command()
@click.argument("first", metavar="CASE", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.argument("second", metavar="CASE", type=click.Path(path_type=Path, exists=True, dir_okay=False))
@click.option(
    "--keep",
    type=click.Path(path_type=Path, dir_okay=False),
    metavar="NEW",
    help="Write the first entry to this new file with the record that it was compared: when, what, which places "
    "differed. The note then says so. Nobody is named; a file that exists is never overwritten.",
)
@_format
@_out
@_site
def compare(
    first: Path, second: Path, keep: Path | None, output_format: str, out: Path | None, site: Path | None
) -> None:
    """Every difference between two entries of the same case (blind re-entry by the second pharmacist).

    Exit status 0 where the entries agree, 1 where they differ, 2 where one cannot be read.
    """
    from datetime import datetime

    from pkcalc.case import load_case
    from pkcalc.note.data import dumps
    from pkcalc.reentry import compare as compare_cases
    from pkcalc.reentry import keep as with_record

    one, two = load_case(first), load_case(second)
    if keep is not None:
        _refuse_to_keep(first, second, keep)
    found = compare_cases(one, two, site)
    if keep is not None:
        _write_new(keep, with_record(one, found, datetime.now()))
    text = dumps(found.as_dict()) if output_format == "json" else found.text()
    if out is None:
        click.echo(text, nl=False)
    else:
        out.write_text(text, encoding="utf-8")
        click.echo(f"Written: {out}", err=True)
    if not found.equal:
        sys.exit(1)


def _refuse_to_keep(first: Path, second: Path, new: Path) -> None:
    """One entry twice is no re-entry, and no file is overwritten."""
    from pkcalc.errors import CaseError, Problem

    if first.samefile(second):
        raise CaseError(
            Problem(
                "--keep", "both entries are the same file", "two entries", "Let a second person type the case again"
            )
        )
    _refuse_existing(new)


def _refuse_existing(new: Path) -> None:
    from pkcalc.errors import CaseError, Problem

    if new.exists():
        raise CaseError(
            Problem("--keep", f"{new.name} exists already", "a file that does not exist yet", "Give another name")
        )


def _write_new(new: Path, file: CaseFile) -> None:
    from pkcalc.case import dump_case_file

    with new.open("x", encoding="utf-8") as stream:
        stream.write(dump_case_file(file))
    click.echo(f"Written: {new}", err=True)


@cli.command()
@click.option("--format", "output_format", type=click.Choice(FORMATS), default="text", show_default=True)
@click.option("--save", type=click.Path(path_type=Path, dir_okay=False), help="Write the record as PDF to this file.")
def selfcheck(output_format: str, save: Path | None) -> None:
    """Re-run the published examples on this machine and print the table, for local acceptance.

    Exit status 0 where every row agrees, 1 on any miss.
    """
    from pkcalc.acceptance import accept, record_data, record_pdf, record_text

    record = accept()
    if output_format == "json":
        _print_json(record_data(record))
    else:
        click.echo(record_text(record), nl=False)
    if save is not None:
        save.write_bytes(record_pdf(record))
        click.echo(f"Written: {save}", err=True)
    if not record.all_agree:
        sys.exit(1)


# --- a department's own records --------------------------------------------------------------------------


@cli.command()
@click.argument("folder", metavar="FOLDER", type=click.Path(path_type=Path, file_okay=False))
@click.option("--drug", default="phenytoin", show_default=True, help="A drug of `pkcalc drugs`.")
@_site
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder of results; a run that was stopped goes on in it. Default: pkcalc-backtest within FOLDER.",
)
@click.option(
    "--workers",
    type=click.IntRange(0, 1024),
    default=0,
    show_default=True,
    help="Processes on this machine, by Dask; 0: this process alone.",
)
@click.option("--cluster", default="", metavar="ADDRESS", help="A Dask scheduler, such as tcp://host:8786.")
@click.option(
    "--method",
    "methods",
    type=click.Choice(FORECASTS),
    multiple=True,
    help="Forecast by this alone, and quicker; may be given again. Default: by all four.",
)
@click.option(
    "--synthetic",
    type=click.IntRange(1, 1_000_000),
    help="First fill FOLDER, new or empty, with so many invented patients.",
)
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="For --synthetic.")
def backtest(
    folder: Path,
    drug: str,
    site: Path | None,
    out: Path | None,
    workers: int,
    cluster: str,
    methods: tuple[str, ...],
    synthetic: int | None,
    seed: int,
) -> None:
    """Predicted against observed on a department's own records.

    FOLDER holds patients.csv, doses.csv and levels.csv with a column `patient`, or one case file per patient.
    Each level is forecast from what was known before it. Exit status 0 done, 1 interrupted or not whole.

    \b
    Columns (UTF-8; the first row names them; commas or semicolons; values with their unit):
    patients.csv  patient (your own key), weight, age, sex, height, albumin,
                  population, any question of the case file (yes, no, unknown),
                  and group_NAME for subgroups of your own
    doses.csv     patient, form, amount, unit, at or every with from and until,
                  product, over, rate, missed (with | between), source, confirmed, given_by
    levels.csv    patient, value, unit, kind (total, free, normalised), drawn,
                  normalised_by, albumin, albumin_taken, sample
    """
    if workers and cluster:
        raise click.UsageError("Give --workers or --cluster, not both")
    from pkcalc.backtest.command import backtest as run_backtest

    if synthetic is not None:
        from pkcalc.backtest.department import write_department

        write_department(folder, drug=drug, count=synthetic, seed=seed)
        click.echo(f"Written: {synthetic:,} invented patients in {folder}", err=True)
    status, text = run_backtest(
        folder, drug=drug, site=site, out=out, workers=workers, cluster=cluster, methods=methods
    )
    click.echo(text, nl=False)
    if status:
        sys.exit(status)
