"""The demo, end to end through the command line: the README's main job, its page, and what it should find."""

from __future__ import annotations

import base64
import hashlib
import html.parser
from dataclasses import replace
from pathlib import Path

import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.base.run import Run
from anneal_ref.studies.archive import Archive
from anneal_ref.studies.assess import Verdict, assess
from anneal_ref.studies.study import Study
from anneal_ref.views import make_saltmarsh
from anneal_ref.views.cli import main
from anneal_ref.views.demo import copy_demo
from anneal_ref.views.report import page, write_page


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return copy_demo("saltmarsh", tmp_path_factory.mktemp("demo") / "saltmarsh")


@pytest.fixture(scope="module")
def text(verdict: Verdict) -> str:
    return page(verdict)


@pytest.fixture(scope="module")
def verdict(folder: Path) -> Verdict:
    return assess(Study.read(folder / "study.toml"), Archive(folder / "truth"), run=Run(progress=False))


def test_the_main_job_runs_and_exits_with_0(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(folder.parent)
    assert main(["demo", "saltmarsh", "--into", "another"]) == 0
    assert "anneal-ref assess another/study.toml" in capsys.readouterr().out
    assert main(["plan", "saltmarsh/study.toml"]) == 0
    assert "To do: 6 references" in capsys.readouterr().out
    assert not Path("saltmarsh/truth").exists()
    assert main(["assess", "saltmarsh/study.toml"]) == 0
    out = capsys.readouterr().out
    assert "INCONCLUSIVE. The samples do not settle whether the processor meets the limit at 0.8 ns" in out
    assert "At 4 ns it meets the limit" in out
    assert Path("saltmarsh/study.html").stat().st_size > 100_000
    assert len(list(Path("saltmarsh/truth").glob("*.h5"))) == 6
    assert main(["plan", "saltmarsh/study.toml"]) == 0
    assert "Nothing to solve" in capsys.readouterr().out
    assert main(["reference", "saltmarsh/study.toml"]) == 0
    assert capsys.readouterr().out.count("converged") == 6
    assert main(["audit", "saltmarsh/truth"]) == 0
    # of six references only one is for these samples
    samples = [str(one) for one in sorted(Path("saltmarsh/samples/triangle_4ns").glob("*.csv"))]
    capsys.readouterr()
    assert [main(["compare", str(one), *samples]) for one in Path("saltmarsh/truth").glob("*.h5")].count(0) == 1
    captured = capsys.readouterr()
    assert "by their labels: 0, 1, 2, 4" in captured.out
    assert captured.err.count("anneal-ref compare: saltmarsh") == 5


def test_at_least_three_lattices_two_durations_a_thousand_shots(verdict: Verdict) -> None:
    assert len({one.reference.anneal.instance.lattice.name for one in verdict.judged}) >= 3
    assert {one.comparison.n_sites for one in verdict.judged} <= set(range(12, 17))
    assert {one.comparison.n_shots for one in verdict.judged} == {1000}
    assert len(verdict.pooled) == 2


def test_the_stated_imperfections_are_found(verdict: Verdict) -> None:
    """The spin that is misread is the most involved one; the weak coupler is the worst pair of its case."""
    cases = {one.case.label: one for one in verdict.judged}
    misread = cases["triangle, 4 ns"]
    labels = misread.reference.anneal.instance.lattice.labels
    assert labels[misread.comparison.pairs.site_sigma().argmax()] == make_saltmarsh.READOUT[1]
    expected = 1 - make_saltmarsh.READOUT[2] - make_saltmarsh.READOUT[3]
    assert misread.comparison.pairs.site_gain()[list(labels).index(6)] == pytest.approx(expected, abs=0.03)
    weak = cases["ladder, 0.8 ns"].comparison.pairs
    assert (weak.first[0], weak.second[0]) == make_saltmarsh.WEAK_COUPLER[1]
    # couplings that are too weak leave too much energy
    sigmas = [one.comparison.sigma["residual_energy"] for one in verdict.judged]
    assert min(sigmas) > 0


def test_the_samples_are_those_that_the_script_makes(folder: Path, tmp_path: Path) -> None:
    for name in ("study.toml", "schedule.csv"):
        (tmp_path / name).write_bytes((folder / name).read_bytes())
    make_saltmarsh.make(tmp_path)
    made = sorted(path.relative_to(tmp_path) for path in tmp_path.glob("samples/*/*.csv"))
    assert made == sorted(path.relative_to(folder) for path in folder.glob("samples/*/*.csv"))
    differ = [path for path in made if (tmp_path / path).read_text() != (folder / path).read_text()]
    # another machine may round a probability to the other side of a random number, rarely
    assert len(differ) <= 1


def test_a_demo_overwrites_nothing(tmp_path: Path) -> None:
    (tmp_path / "schedule.csv").write_text("mine")
    with pytest.raises(InputError, match=r"would overwrite .*schedule.csv; nothing was written"):
        copy_demo("saltmarsh", tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["schedule.csv"]
    with pytest.raises(InputError, match="did you mean 'saltmarsh'"):
        copy_demo("saltmarch", tmp_path / "new")
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="cannot be written"):
        copy_demo("saltmarsh", tmp_path / "file" / "below")


class _Links(html.parser.HTMLParser):
    """Collect what a page would load, and its pictures."""

    def __init__(self) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.loaded: list[str] = []
        self.pictures: list[tuple[str, str]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = dict(attrs)
        self.tags.append(tag)
        self.loaded += [value or "" for key, value in attrs if key in ("src", "href", "srcset", "data", "action")]
        if tag == "img":
            self.pictures.append((found["src"] or "", found["alt"] or ""))


def test_the_page_loads_nothing_and_shows_everything(verdict: Verdict, text: str) -> None:
    links = _Links()
    links.feed(text)
    assert all(one.startswith("data:image/svg+xml;base64,") for one in links.loaded)
    assert not {"script", "link", "iframe", "object"} & set(links.tags)
    assert "url(" not in text
    assert "@import" not in text
    # errors, two durations, energy and order, six lattices
    assert len(links.pictures) == 1 + 2 + 2 + 6
    for source, alt in links.pictures:
        assert alt
        assert base64.b64decode(source.partition(",")[2]).lstrip().startswith(b"<?xml")
    for one in verdict.judged:
        assert one.reference.identity in text
        files = b"".join(file.read_bytes() for file in sorted(one.case.files))
        assert hashlib.sha256(files).hexdigest() in text
        assert one.case.label in text
    assert verdict.study.sha256 in text
    body = text[text.index("<main>") :]
    assert body.index("Inconclusive") < body.index("<h2>")


def test_what_the_study_says_cannot_become_markup(verdict: Verdict, text: str) -> None:
    """And all else is the same, byte by byte, for the same verdict."""
    marked = page(replace(verdict, study=replace(verdict.study, name="<script>alert(1)</script> & co")))
    assert "<script>" not in marked
    assert marked.replace("&lt;script&gt;alert(1)&lt;/script&gt; &amp; co", verdict.study.name) == text


def test_a_page_that_cannot_be_written_leaves_the_old_one(
    verdict: Verdict, text: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    target = tmp_path / "page.html"
    target.write_text("old")

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("anneal_ref.views.report.page", lambda verdict: text)
    monkeypatch.setattr("anneal_ref.views.report.os.fsync", full)
    with pytest.raises(InputError, match="page.html cannot be written: the disk is full"):
        write_page(verdict, target)
    assert target.read_text() == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["page.html"]
    monkeypatch.setattr("anneal_ref.views.report.os.fsync", lambda descriptor: None)
    write_page(verdict, target)
    assert target.read_text(encoding="utf-8") == text
