"""The page of a verdict: one HTML file with tables, plots, method and identities, and nothing loaded from elsewhere."""

from __future__ import annotations

import os
import secrets
from importlib.resources import files
from pathlib import Path

import jinja2

from anneal_ref.base.errors import InputError, in_words
from anneal_ref.studies.assess import Verdict
from anneal_ref.studies.summary import WORDS, headline
from anneal_ref.views.sections import facts, identities, sections


def write_page(verdict: Verdict, path: str | Path) -> Path:
    """Write the page of a verdict; an older page is replaced in one step.

    Parameters
    ----------
    verdict : Verdict
    path : path
        Usually ends in .html.

    Raises
    ------
    InputError
        The file cannot be written; an older one is untouched.
    """
    path = Path(path)
    text = page(verdict)
    aside = path.with_name(f".{path.name}.{secrets.token_hex(4)}.part")
    try:
        with aside.open("x", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(aside, path)
    except OSError as error:
        aside.unlink(missing_ok=True)
        raise InputError(
            f"the page {path} cannot be written: {in_words(error)}; give another file with --page"
        ) from error
    return path


def page(verdict: Verdict) -> str:
    """Return the page of a verdict as HTML."""
    template = files("anneal_ref.views").joinpath("page.html.jinja").read_text(encoding="utf-8")
    environment = jinja2.Environment(autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True)
    study = verdict.study
    return environment.from_string(template).render(
        name=study.name,
        description=study.description,
        verdict={
            "outcome": verdict.outcome,
            "word": WORDS[verdict.outcome].capitalize(),
            "sentence": headline(verdict),
        },
        facts=facts(verdict),
        sections=sections(verdict),
        identities=list(identities(verdict)),
        provenance=", ".join(f"{key} {value}" for key, value in verdict.provenance.items()),
    )
