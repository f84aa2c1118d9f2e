"""The report as a file: what it says, in which order, and what it must never hold."""

import csv
import json
import os
import re
import subprocess
import sys
import time
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path

import matplotlib
import pytest

from idlearn.errors import RunFolderError
from idlearn.reports import build_report

HOSTILE = "<img src=x onerror=alert(1)>"
Invent = Callable[..., Path]
TABLES = (
    "log",
    "signals",
    "free_run",
    "residuals",
    "step_response",
    "models",
    "contenders",
    "interval",
    "ladder",
    "closed_loop",
    "paired",
    "learning",
    "stress",
    "ledger",
    "scenarios",
)


class Page(HTMLParser):
    """Elements with their attributes, and the text that a reader sees."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str]]] = []
        self.texts: list[str] = []
        self._skipped = 0
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        """Note an element."""
        self.elements.append((tag, {k: v or "" for k, v in attrs}))
        self._skipped += tag in ("style", "title")

    def handle_endtag(self, tag: str) -> None:
        """Leave a part that no reader sees."""
        self._skipped -= tag in ("style", "title")

    def handle_data(self, data: str) -> None:
        """Note a text."""
        if not self._skipped and data.strip():
            self.texts.append(data.strip())

    def values(self, attribute: str) -> list[str]:
        """Return all values of an attribute."""
        return [a[attribute] for _, a in self.elements if attribute in a]


def read(folder: Path) -> str:
    return build_report(folder).read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def standard(invent_in: Callable[..., Path], tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return an invented run of two outputs and two actuators whose report is built."""
    folder = invent_in(
        tmp_path_factory.mktemp("standard"), outputs=("a", "b"), actuators=("c", "d")
    )
    build_report(folder)
    return folder


@pytest.mark.parametrize("outcome", ["go", "no-go", "undecided"])
def test_the_verdict_comes_first(invent: Invent, outcome: str) -> None:
    folder = invent(outcome=outcome, rows=30)
    page = Page(read(folder))
    sentence = json.loads((folder / "verdict.json").read_text())["sentence"]
    assert page.texts[:2] == [outcome.upper(), sentence]
    assert [t for t, _ in page.elements if t in ("h1", "h2")][0] == "h1"
    assert sum(t == "h1" for t, _ in page.elements) == 1


def test_page_one_holds_ratio_cautions_and_title_block(standard: Path) -> None:
    front = (standard / "report.html").read_text().split("</header>")[0]
    for words in (
        "0.82 (0.73 to 0.92)",
        "Nothing has been shown on the plant itself",
        "Interlocks and trips stay as they are, outside every controller and above it",
        "functional-safety practice and licensed people",
        "supervised trial under the site",
        "no connection by which it could act on a plant",
        "invented kiln",
        "before the results",
    ):
        assert words.replace("'", "&#39;") in front


def test_limits_fixed_after_the_results_are_called_so(invent: Invent) -> None:
    folder = invent(rows=30)
    manifest = json.loads((folder / "manifest.json").read_text())
    manifest["acceptance"]["fixed_at"] = "2032-01-01T00:00:00+00:00"
    (folder / "manifest.json").write_text(json.dumps(manifest))
    assert "AFTER the results" in read(folder)


def test_chapters_stand_in_their_order(standard: Path) -> None:
    text = (standard / "report.html").read_text()
    assert re.findall(r'<section class="chapter" id="(\w+)"', text) == [
        "clauses",
        "controllers",
        "ladder",
        "costs",
        "loop",
        "pairs",
        "stress",
        "models",
        "learning",
        "log",
        "fairness",
        "settle",
        "owner",
        "manifest",
        "words",
    ]
    assert "to be filled by the owner" in text


def test_every_figure_has_a_message_and_its_numbers(standard: Path) -> None:
    text = (standard / "report.html").read_text()
    figures = re.findall(r"<figure.*?</figure>", text, flags=re.S)
    assert len(figures) >= 12
    numbered = []
    for figure in figures:
        page = Page(figure)
        messages = [a["aria-label"] for _, a in page.elements if a.get("role") == "img"]
        assert len(messages) == 1
        assert messages[0].endswith(".")
        assert len(messages[0].split()) >= 6
        (twin,) = page.values("href")[-1:]
        assert (standard / twin).is_file()
        numbered += re.findall(r"Figure (\d+)", figure)
    assert [int(n) for n in numbered] == list(range(1, len(figures) + 1))


def test_nothing_points_outside(standard: Path) -> None:
    text = (standard / "report.html").read_text()
    page = Page(text)
    assert not re.search(r"https?:|//|@import|<script|<iframe|javascript:", text, flags=re.I)
    assert not {t for t, _ in page.elements} & {"script", "img", "iframe", "object", "embed"}
    assert all(u.startswith("#") for u in re.findall(r"url\(([^)]*)\)", text))
    links = {h for h in page.values("href") if not h.startswith(("#", "tables/"))}
    assert links == {"data:,"}
    assert "default-src 'none'" in page.values("content")[-1]


def test_addresses_within_the_page_are_unique_and_exist(standard: Path) -> None:
    text = (standard / "report.html").read_text()
    page = Page(text)
    names = page.values("id")
    assert len(names) == len(set(names))
    wanted = [h[1:] for h in page.values("href") if h.startswith("#")]
    wanted += re.findall(r"url\(#([^)]*)\)", text)
    wanted += page.values("aria-labelledby")
    assert set(wanted) <= set(names)


def test_names_from_the_log_are_only_ever_text(invent: Invent) -> None:
    folder = invent(
        outputs=(HOSTILE, "$x_1$"),
        actuators=('"><script>alert(2)</script>',),
        units=("</style>", "%\x07"),
        candidate="<b>bold</b> & 'sly'",
    )
    text = read(folder)
    page = Page(text)
    assert not {t for t, _ in page.elements} & {"img", "script", "b"}
    assert "onerror" not in {k for _, a in page.elements for k in a}
    assert "&lt;img src=x onerror=alert(1)&gt;" in text
    assert any(HOSTILE in t for t in page.texts)
    assert any("$x_1$" in t for t in page.texts)
    assert text.count("</style>") == 1


@pytest.mark.parametrize(
    "kind",
    [
        {},
        {"judged": False},
        {"incumbent": "", "rows": 60},
        {"scale": 1e-9, "rows": 60},
        {"scale": 3.3e8, "rows": 60},
        {
            "outcome": "undecided",
            "outputs": ("a", "b", "c", "d"),
            "actuators": ("e", "f", "g", "h"),
            "others": tuple(f"classical number {i} with a long name" for i in range(9)),
        },
    ],
)
def test_no_word_of_a_machine_and_no_giant(invent: Invent, kind: dict[str, object]) -> None:
    text = read(invent(**kind))
    shown = " ".join([*Page(text).texts, *Page(text).values("aria-label")])
    assert not re.search(r"\b(nan|inf|None(?! of)|null|True|False|undefined)\b", shown)
    assert not re.search(r"\bNaN\b", text)
    assert len(text.encode()) < 2_000_000


def test_without_a_ratio_it_says_why(invent: Invent) -> None:
    text = read(invent(judged=False, rows=30))
    assert "There is no cost ratio" in text
    assert "The cost ratio and where" not in text
    assert "no rows in tables/contenders.csv" in text


@pytest.mark.parametrize("name", TABLES)
def test_any_table_may_be_missing(invent: Invent, name: str) -> None:
    folder = invent(rows=12)
    (folder / "tables" / f"{name}.csv").unlink()
    text = read(folder)
    # what is left out is said, but for tables that only add to others
    assert (f"no rows in tables/{name}.csv" in text) == (
        name not in ("interval", "signals", "scenarios")
    )


def test_all_tables_may_be_empty_or_missing_at_once(invent: Invent) -> None:
    folder = invent()
    for path in (folder / "tables").glob("*.csv"):
        path.write_text(path.read_text().split("\n")[0] + "\n")
    empty = read(folder)
    for path in (folder / "tables").glob("*.csv"):
        path.unlink()
    assert empty == read(folder)
    assert "0.82 (0.73 to 0.92)" in empty


@pytest.mark.parametrize("cell", ["", "inf", "-inf", "1e300", "-1e-300", "0", "abc", "-5"])
def test_any_cell_may_be_odd(invent: Invent, cell: str) -> None:
    folder = invent(outputs=("a", "b"), rows=60)
    keep = {
        "name",
        "kind",
        "cost",
        "part",
        "step",
        "controller",
        "scenario",
        "signal",
        "role",
        "plant",
        "input",
        "output",
        "against",
        "run",
        "stress",
        "item",
        "of",
        "unit",
        "family",
        "orders",
        "reasons",
        "sentence",
        "pid as found",
        "pid",
        "lqg",
        "linear",
        "evolution",
        "predictive",
    }
    for path in (folder / "tables").glob("*.csv"):
        with path.open(newline="") as lines:
            head, *rows = csv.reader(lines)
        with path.open("w", newline="") as lines:
            csv.writer(lines).writerows(
                [
                    head,
                    *(
                        [c if n in keep else cell for n, c in zip(head, r, strict=True)]
                        for r in rows
                    ),
                ]
            )
    shown = " ".join(Page(read(folder)).texts)
    assert not re.search(r"\b(nan|inf)\b", shown)


def test_one_row_per_table_is_enough(invent: Invent) -> None:
    folder = invent()
    for path in (folder / "tables").glob("*.csv"):
        path.write_text("\n".join(path.read_text().splitlines()[:2]) + "\n")
    assert "Figure 1" in read(folder)


def test_a_band_that_runs_away_is_called_so(invent: Invent) -> None:
    folder = invent()
    path = folder / "tables" / "free_run.csv"
    with path.open(newline="") as lines:
        head, *rows = csv.reader(lines)
    high = head.index("high")
    for row in rows:
        if row[0] == "jury":
            row[high] = "1e60"
    with path.open("w", newline="") as lines:
        csv.writer(lines).writerows([head, *rows])
    text = read(folder)
    assert "Mostly wider than all the data are the bands of temperature (jury models)" in text
    # coordinates stay within what a drawing can hold
    numbers = re.findall(r"[ML] (-?[\d.e+]+)[ ,](-?[\d.e+]+)", text)
    assert max(abs(float(v)) for pair in numbers for v in pair) < 1e4


def test_structures_that_were_tried_are_shown_if_there_are_any(invent: Invent) -> None:
    folder = invent(rows=30)
    assert "Structures tried" not in read(folder)
    (folder / "tables" / "structures_jury.csv").write_text(
        "family,n_a,whiteness_p,bic,status\narx,2,1e-40,-8919.99,ok\narx,3,0.25,-8800,ok\n"
    )
    text = read(folder)
    assert "Structures tried on the jury part: the best 2 of 2" in text
    assert "below 0.001" in text
    assert 'href="tables/structures_jury.csv"' in text


def test_an_inequality_is_marked(invent: Invent) -> None:
    fair = read(invent("fair", rows=30))
    unfair = read(invent("unfair", unequal=True, rows=30))
    assert "UNEQUAL" not in fair
    assert "UNEQUAL" in unfair
    assert "Not alike: budget limit." in unfair
    assert re.search(r'<tr role="row" class="marked">.*?budget limit', unfair, flags=re.S)
    assert "pid: 9000 plant-steps" in unfair


def test_same_folder_same_bytes_in_any_process(standard: Path) -> None:
    folder = standard
    first = (folder / "report.html").read_bytes()
    assert build_report(folder).read_bytes() == first
    code = (
        "import sys; from idlearn.reports import build_report; build_report(sys.argv[1]); "
        "assert 'matplotlib.pyplot' not in sys.modules"
    )
    root = Path(__file__).parents[2]
    environment = {**os.environ, "PYTHONHASHSEED": "77", "PYTHONPATH": str(root)}
    subprocess.run([sys.executable, "-c", code, str(folder)], check=True, env=environment)
    assert (folder / "report.html").read_bytes() == first


def test_global_settings_of_matplotlib_stay(invent: Invent) -> None:
    before = dict(matplotlib.rcParams)
    build_report(invent(rows=30))
    assert dict(matplotlib.rcParams) == before


def test_only_the_report_is_written(invent: Invent) -> None:
    folder = invent(rows=30)
    before = {p.relative_to(folder) for p in folder.rglob("*")}
    build_report(folder)
    assert {p.relative_to(folder) for p in folder.rglob("*")} - before == {Path("report.html")}


def test_it_is_built_in_below_five_seconds(invent: Invent) -> None:
    folder = invent()
    start = time.process_time()
    build_report(folder)
    assert time.process_time() - start < 5


def test_a_folder_without_verdict_is_refused(tmp_path: Path) -> None:
    with pytest.raises(RunFolderError, match=r"holds no verdict\.json; name the folder"):
        build_report(tmp_path)


def test_a_broken_or_strange_verdict_is_refused(invent: Invent) -> None:
    folder = invent()
    (folder / "verdict.json").write_text("{")
    with pytest.raises(RunFolderError, match=r"verdict\.json cannot be read as JSON"):
        build_report(folder)
    (folder / "verdict.json").write_text('{"format": "idlearn-verdict/9"}')
    with pytest.raises(RunFolderError, match=r"format 'idlearn-verdict/9' where"):
        build_report(folder)


def test_without_a_manifest_the_report_says_so(invent: Invent) -> None:
    folder = invent(rows=30)
    (folder / "manifest.json").unlink()
    assert "This run has no manifest.json" in read(folder)
