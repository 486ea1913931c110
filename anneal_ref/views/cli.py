"""The command line: `anneal-ref demo | plan | reference | assess | converge | compare | audit`, thin over the library.

Exit codes
----------
0    the command did its work; `assess` also when the verdict is "reject" or "inconclusive"
1    `assess --strict`: the verdict is "reject"; `audit`: a file of the archive cannot be trusted
2    the input is not allowed, or the output cannot be written; one paragraph on standard error says why
3    `assess --strict`: the verdict is "inconclusive"
130  interrupted; finished references stay in the archive

Everything heavy is imported inside the commands, so that `--help` answers at once.
"""

from __future__ import annotations

import argparse
import os
import sys
import textwrap
import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn, TextIO

from anneal_ref.base.errors import AnnealRefError, AnnealRefWarning, InputError, in_words
from anneal_ref.base.provenance import library_version

OK, REJECTED, BAD_INPUT, INCONCLUSIVE, INTERRUPTED = 0, 1, 2, 3, 130


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code.

    Parameters
    ----------
    argv : sequence of str, optional
        The arguments; by default those of the process.
    """
    options = _parser().parse_args(argv)
    with warnings.catch_warnings():
        warnings.showwarning = _Notes()
        warnings.simplefilter("always", AnnealRefWarning)
        try:
            code = int(options.command(options))
            sys.stdout.flush()
            return code
        except AnnealRefError as error:
            print(f"anneal-ref {options.name}: {error}", file=sys.stderr)
            return BAD_INPUT
        except KeyboardInterrupt:
            print(_farewell(options), file=sys.stderr)
            return INTERRUPTED
        except BrokenPipeError:
            # the reader of our output went away; keep the interpreter from complaining at exit
            _silence()
            return OK
        except OSError as error:
            where = f"{error.filename}: " if error.filename else "the output cannot be written: "
            print(f"anneal-ref {options.name}: {where}{in_words(error)}", file=sys.stderr)
            _silence()
            return BAD_INPUT


def entry() -> NoReturn:
    """Run as `python -m anneal_ref.views.cli`."""
    sys.exit(main())


def _demo(options: argparse.Namespace) -> int:
    from anneal_ref.views.demo import copy_demo

    folder = copy_demo(options.demo, options.into)
    print(
        f"The demo study is in {folder}{os.sep}. It holds a schedule, a study file and the samples of an invented "
        "processor."
    )
    print(f"Next:  anneal-ref plan {folder / 'study.toml'}     what the work will cost")
    print(f"       anneal-ref assess {folder / 'study.toml'}   the verdict, with a page of tables and plots")
    return OK


def _plan(options: argparse.Namespace) -> int:
    from anneal_ref.studies.archive import Archive
    from anneal_ref.studies.assess import plan
    from anneal_ref.studies.study import Study
    from anneal_ref.views.tables import plan_table

    study = Study.read(options.study)
    archive = Archive(_archive(options), create=False)
    print(plan_table(study, plan(study, archive), archive.folder))
    problems = study.problems()
    if problems:
        sys.stdout.flush()
        raise InputError("\n  ".join(["the samples cannot be used as they are:", *problems]))
    return OK


def _reference(options: argparse.Namespace) -> int:
    from anneal_ref.base.run import Run
    from anneal_ref.studies.archive import Archive
    from anneal_ref.studies.assess import solve
    from anneal_ref.studies.study import Study

    study = Study.read(options.study)
    archive = Archive(_archive(options))
    solve(study, archive, run=Run(threads=options.threads))
    print(archive.table())
    return OK


def _assess(options: argparse.Namespace) -> int:
    from anneal_ref.base.run import Run
    from anneal_ref.studies.archive import Archive
    from anneal_ref.studies.assess import assess
    from anneal_ref.studies.study import Study

    study = Study.read(options.study)
    archive = Archive(_archive(options))
    verdict = assess(study, archive, run=Run(threads=options.threads))
    failure: InputError | None = None
    # the page comes first, so that it is there even if the table cannot be printed
    if not options.no_page:
        from anneal_ref.views.report import write_page

        page = options.page or Path(options.study).with_suffix(".html")
        try:
            write_page(verdict, page)
        except InputError as error:
            failure = error
    print(verdict)
    if failure is not None:
        raise failure
    if not options.no_page:
        print(f"\nPage with plots: {page}\nReferences:      {archive.folder}{os.sep}")
    return {"accept": OK, "reject": REJECTED, "inconclusive": INCONCLUSIVE}[verdict.outcome] if options.strict else OK


def _converge(options: argparse.Namespace) -> int:
    from anneal_ref.base.run import Run
    from anneal_ref.judgement.matching import matching_bond_dimension
    from anneal_ref.studies.archive import Archive
    from anneal_ref.studies.study import Study
    from anneal_ref.truth.convergence import converge

    study = Study.read(options.study)
    archive = Archive(_archive(options), create=False)
    cases = [case for case in study.cases if options.instance in (None, case.name)]
    if not cases:
        names = ", ".join(dict.fromkeys(case.name for case in study.cases))
        raise InputError(f"--instance must be one of {names}; got {options.instance}")
    done = []
    for case in cases:
        truth = archive.find(case.anneal, study.table.truth.tolerance)
        convergence = converge(
            case.anneal, options.bond_dimensions, options.steps, reference=truth, run=Run(threads=options.threads)
        )
        done.append((case, convergence))
        print(f"{case.label}\n{convergence}")
        for error in options.error:
            print(f"  {convergence.predict(error)}")
        if options.plots:
            from anneal_ref.views.convergence_plots import convergence_figure

            options.plots.mkdir(parents=True, exist_ok=True)
            picture = options.plots / f"{case.name}_{case.anneal.duration:g}.png"
            convergence_figure(convergence, case.label).savefig(picture, dpi=150)
            print(f"  picture: {picture}")
        print(flush=True)
    for duration in sorted({case.anneal.duration for case, _ in done}):
        pairs = [(case, one) for case, one in done if case.anneal.duration == duration]
        if all(case.files and one.measured for case, one in pairs):
            matching = matching_bond_dimension([one for _, one in pairs], [case.samples() for case, _ in pairs])
            print(f"duration {duration:g}: {matching}\n")
    return OK


def _compare(options: argparse.Namespace) -> int:
    from anneal_ref.judgement.compare import compare
    from anneal_ref.studies.archive import read_reference
    from anneal_ref.studies.sample_files import read_samples

    reference = read_reference(options.reference)
    print(compare(reference, read_samples(options.samples, reference.anneal, options.values, "the option --values")))
    labels = reference.anneal.instance.lattice.labels.tolist()
    if labels != list(range(len(labels))):
        print(f"sites 0 to {len(labels) - 1} are, by their labels: {', '.join(map(str, labels))}")
    return OK


def _audit(options: argparse.Namespace) -> int:
    from anneal_ref.base.run import Run
    from anneal_ref.studies.archive import Archive

    report = Archive(options.archive, create=False).audit(
        recompute=options.recompute, seed=options.seed, run=Run(threads=options.threads)
    )
    print(report)
    if not report.rows:
        raise InputError(f"there are no references in {options.archive}; check the name of the folder")
    return OK if report.sound else REJECTED


def _archive(options: argparse.Namespace) -> Path:
    """Folder of the references: the one given, or `truth` beside the study file."""
    return Path(options.archive) if options.archive else Path(options.study).parent / "truth"


def _silence() -> None:
    """Let what is still waiting for standard output go nowhere, so that the interpreter can end in peace."""
    try:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except (OSError, ValueError):
        return


class _Notes:
    """Shows the warnings of the package as notes on standard error, each sentence once."""

    def __init__(self) -> None:
        self.told: set[str] = set()

    def __call__(
        self,
        message: Warning | str,
        category: type[Warning],
        filename: str,
        lineno: int,
        file: TextIO | None = None,
        line: str | None = None,
    ) -> None:
        if not issubclass(category, AnnealRefWarning):
            print(warnings.formatwarning(message, category, filename, lineno), end="", file=sys.stderr)
        elif str(message) not in self.told:
            self.told.add(str(message))
            print(f"note: {message}", file=sys.stderr)


def _farewell(options: argparse.Namespace) -> str:
    kept = ""
    if options.name in ("assess", "reference"):
        kept = (
            f" References that were finished are in {_archive(options)}{os.sep}; the same command goes on from there."
        )
    return f"\nanneal-ref {options.name}: interrupted.{kept}"


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="anneal-ref",
        description="Ground truth with error bars for programmable analog Ising processors.",
        epilog=textwrap.dedent("""\
            exit codes: 0 done; 1 rejected (assess --strict) or archive unsound (audit); 2 input not allowed;
            3 inconclusive (assess --strict); 130 interrupted.
            first steps: anneal-ref demo saltmarsh && anneal-ref assess saltmarsh/study.toml"""),
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("-V", "--version", action="version", version=f"anneal-ref {library_version()}")
    commands = parser.add_subparsers(dest="name", required=True, metavar="command")

    demo = commands.add_parser("demo", help="copy a demo study to a folder")
    demo.add_argument("demo", metavar="NAME", help="saltmarsh")
    demo.add_argument("--into", metavar="DIR", help="folder to make (default: ./NAME); nothing in it is overwritten")
    demo.set_defaults(command=_demo)

    plan = commands.add_parser("plan", help="check a study and show what its references will cost, before any work")
    plan.set_defaults(command=_plan)
    reference = commands.add_parser("reference", help="compute the missing references of a study and archive them")
    reference.set_defaults(command=_reference)
    assess = commands.add_parser("assess", help="judge a processor's samples: references, comparison, verdict, page")
    assess.set_defaults(command=_assess)
    converge = commands.add_parser(
        "converge", help="matrix product states at several bond dimensions: errors, and where they match the samples"
    )
    converge.set_defaults(command=_converge)
    for command in (plan, reference, assess, converge):
        command.add_argument("study", metavar="STUDY", help="study file (TOML)")
        command.add_argument("--archive", metavar="DIR", help="folder of references (default: truth/ beside the study)")
    assess.add_argument(
        "--page", metavar="FILE", type=Path, help="where the HTML page goes (default: beside the study)"
    )
    assess.add_argument("--no-page", action="store_true", help="print the table only")
    assess.add_argument("--strict", action="store_true", help="exit 1 on reject and 3 on inconclusive")

    converge.add_argument(
        "--bond-dimensions", metavar="D", type=int, nargs="+", default=[16, 32, 64, 128], help="default: 16 32 64 128"
    )
    converge.add_argument(
        "--steps", metavar="K", type=int, nargs="+", default=[0, 1], help="halvings of the time step (default: 0 1)"
    )
    converge.add_argument(
        "--error", metavar="E", type=float, nargs="+", default=[1e-2, 1e-3], help="correlation errors to predict for"
    )
    converge.add_argument("--instance", metavar="NAME", help="one instance of the study alone")
    converge.add_argument("--plots", metavar="DIR", type=Path, help="folder for a picture of every case")

    compare = commands.add_parser("compare", help="compare samples with one archived reference")
    compare.add_argument("reference", metavar="REFERENCE.h5")
    compare.add_argument("samples", metavar="SAMPLES", nargs="+", help="files of one instance; each a gauge or batch")
    compare.add_argument(
        "--values",
        choices=("spins", "bits"),
        help="what the files hold: +1 and -1, or 0 and 1 (default: what they say)",
    )
    compare.set_defaults(command=_compare)

    audit = commands.add_parser("audit", help="verify every file of an archive, and recompute some")
    audit.add_argument("archive", metavar="DIR")
    audit.add_argument(
        "--recompute", metavar="F", type=float, default=0.0, help="fraction of references to solve again"
    )
    audit.add_argument("--seed", type=int, default=0, help="which ones are drawn")
    audit.set_defaults(command=_audit)
    for command in (reference, assess, converge, audit):
        command.add_argument("--threads", type=int, default=1, metavar="N", help="threads of the back-end (default: 1)")
    return parser


if __name__ == "__main__":
    entry()
