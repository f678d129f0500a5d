"""The `tfstats` command: verbs, and the exit code of whatever happens."""

from __future__ import annotations

import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import click

import tfstats
from tfstats.command_line.terminal import Terminal
from tfstats.foundations.errors import InputError
from tfstats.foundations.safe_writing import unfinished_path

__all__ = ["command", "main"]

DONE, FAULT, REFUSED, MACHINE, INTERRUPTED = 0, 1, 2, 3, 130


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(tfstats.__version__, prog_name="tfstats", message="%(prog)s %(version)s")
def command() -> None:
    """Baseline-relative time-frequency power and permutation statistics.

    Exit codes: 0 done, 1 a fault of the program, 2 input or plan refused, 3 machine (disk, memory, permission),
    130 interrupted.
    """


@command.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--threads", type=click.IntRange(min=1), help="Threads to use. Default: all CPUs.")
@click.option("--quiet", is_flag=True, help="Print nothing but errors.")
def demo(folder: Path, threads: int | None, quiet: bool) -> None:
    """Simulate a study with a known answer in FOLDER, write its plan, and run it."""
    from tfstats.analysis import run_analysis
    from tfstats.command_line.demo_study import write_demo_study

    terminal = Terminal(quiet=quiet)
    terminal.say("Simulating 20 people who watched sequences of signal lamps, later recalled or missed.")
    plan = write_demo_study(folder)
    again = f"tfstats run {plan} --out {folder / 'results'}"
    with _interruption_named(folder / "results", again), terminal.progress() as progress:
        results = run_analysis(plan, folder / "results", threads=threads, progress=progress, cache=False)
    terminal.findings(results, folder / "results")
    terminal.say(f"The plan is {plan}; its first lines say what was planted.")


@command.command()
@click.argument("files", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="FILE...")
@click.option(
    "--out", type=click.Path(path_type=Path), default=Path("plan.toml"), help="The plan to write. Default: plan.toml."
)
def draft(files: tuple[Path, ...], out: Path) -> None:
    """Look into power files and the tables beside them, and write a commented plan for them.

    What the files do not say is guessed, and marked so, or left blank: `tfstats check` names each blank.
    """
    from tfstats.command_line.draft_printing import print_draft
    from tfstats.plan_file.drafted_plan import write_draft

    print_draft(Terminal(quiet=False), write_draft(files, out), out)


@command.command()
@click.argument("plan", type=click.Path(path_type=Path))
@click.option(
    "--to", "folder", type=click.Path(path_type=Path), required=True, help="The new folder for the converted files."
)
@click.option("--quiet", is_flag=True, help="Print nothing but errors.")
def convert(plan: Path, folder: Path, quiet: bool) -> None:
    """Write the power of PLAN once in HDF5, which is read in blocks, with a plan for the written files."""
    from tfstats.plan_file.converted_study import convert_study

    terminal = Terminal(quiet=quiet)
    with terminal.progress() as progress:
        made = convert_study(plan, folder, progress=progress)
    terminal.say(f"The same study from the converted files: {made}")


@command.command()
@click.argument("plan", type=click.Path(path_type=Path))
def check(plan: Path) -> None:
    """Read everything that PLAN names, compute nothing heavy, and list all that is wrong."""
    from tfstats.command_line.study_check import checked_study

    terminal = Terminal(quiet=False)
    with terminal.progress() as progress:
        overview = checked_study(plan, progress)
    terminal.overview(overview)


@command.command()
@click.argument("plan", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), required=True, help="The results folder to write.")
@click.option("--replace", is_flag=True, help="Replace an existing results folder once the new one is whole.")
@click.option("--threads", type=click.IntRange(min=1), help="Threads to use. Default: all CPUs.")
@click.option("--no-cache", is_flag=True, help="Read every subject again, and keep nothing for a later run.")
@click.option("--quiet", is_flag=True, help="Print nothing but errors.")
def run(plan: Path, out: Path, replace: bool, threads: int | None, no_cache: bool, quiet: bool) -> None:
    """Run the whole analysis of PLAN and write a results folder.

    An interrupted run leaves OUT.unfinished and is taken up again when the plan and the input files are the same.
    """
    from tfstats.analysis import run_analysis

    terminal = Terminal(quiet=quiet)
    with _interruption_named(out, "the same command"), terminal.progress() as progress:
        results = run_analysis(plan, out, replace=replace, threads=threads, progress=progress, cache=not no_cache)
    for notice in results.provenance["cache_notices"]:
        terminal.say(f"mind: {notice}")
    terminal.findings(results, out)


@command.command()
@click.argument("plan", type=click.Path(path_type=Path))
def inspect(plan: Path) -> None:
    """Say what the baseline of PLAN does to its data: findings with severity, numbers and remedy."""
    from tfstats.analysis import study_review
    from tfstats.plan_file import AnalysisPlan
    from tfstats.plan_file.study_stages import study_opened

    terminal = Terminal(quiet=False)
    read = AnalysisPlan.read(plan)
    study = study_opened(read)
    with terminal.progress() as progress:
        review = study_review(read, study, progress)
    terminal.review(read.study.name, review)


@command.command()
@click.argument("folder", type=click.Path(path_type=Path))
def show(folder: Path) -> None:
    """Print the findings of a results FOLDER."""
    from tfstats.reporting import read_results

    Terminal(quiet=False).findings(read_results(folder), folder)


def main(arguments: list[str] | None = None) -> None:
    """Run the command and leave with its exit code."""
    sys.exit(_exit_code(arguments))


def _exit_code(arguments: list[str] | None) -> int:
    _let_any_character_through()
    try:
        # click would turn an interrupt into its own exit code and hide other errors' classes.
        command.main(args=arguments, prog_name="tfstats", standalone_mode=False)
    except InputError as error:
        _say_refused(error)
        return REFUSED
    except click.exceptions.Exit as leave:
        return leave.exit_code
    except SystemExit:
        # click leaves so when whoever reads our output (head, less) has closed it: nothing went wrong here.
        return DONE
    except click.ClickException as error:
        error.show(file=sys.stderr)
        return REFUSED
    except (KeyboardInterrupt, click.exceptions.Abort) as stop:
        # click replaces an interrupt by an exception of its own.
        said = str(stop) or str(stop.__cause__ or "")
        click.echo(f"\nInterrupted. {said}".rstrip(), err=True)
        return INTERRUPTED
    except MemoryError:
        click.echo(
            "tfstats: the memory of this machine does not hold this study; test fewer channels or times.", err=True
        )
        return MACHINE
    except OSError as error:
        click.echo(f"tfstats: the machine refused: {error}.", err=True)
        return MACHINE
    except Exception:
        traceback.print_exc()
        click.echo(
            "tfstats: this is a fault of the program, not of your data; please report the lines above.", err=True
        )
        return FAULT
    return DONE


@contextmanager
def _interruption_named(out: Path, again: str) -> Iterator[None]:
    """Say what an interrupted run leaves, and which command takes it up again."""
    try:
        yield
    except KeyboardInterrupt:
        folder = unfinished_path(out)
        kept = f"{folder} keeps what is finished; {again} takes it up again, while the plan and its files are the same."
        raise KeyboardInterrupt(kept if folder.is_dir() else "Nothing was finished yet.") from None


def _let_any_character_through() -> None:
    """A stream whose encoding lacks a character shows its number: a label must never end a run."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")


def _say_refused(error: InputError) -> None:
    count = len(error.problems)
    head = "tfstats: refused" if count == 1 else f"tfstats: refused, {count} problems"
    click.echo(head + ":", err=True)
    for problem in error.problems:
        click.echo(f"  - {problem}", err=True)


if __name__ == "__main__":
    main()
