"""The page of a report: what it says, that it can be read by anyone, and that a browser takes it."""

import re
import shutil
import subprocess
from html import escape
from html.parser import HTMLParser
from itertools import pairwise

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Edges, Population, StellarSource
from steelyard.integrate.popfile import default_population, population_from_dict
from steelyard.integrate.provenance import made_by
from steelyard.integrate.reporting import report, to_html, write_html
from steelyard.integrate.reporting.choices import USUAL, usual_swaps
from steelyard.integrate.reporting.gathering import CHOICE
from steelyard.integrate.spread import Spread
from steelyard.integrate.spread.stated import StatedError
from steelyard.yields.errors import InputError

VOID = {"meta", "link"}


class Tree(HTMLParser):
    """Elements as (name, attributes, text of all inside), and whether every one is closed."""

    def __init__(self, text):
        super().__init__()
        self.open, self.all = [], []
        self.feed(text)
        self.close()
        assert not self.open

    def handle_starttag(self, name, attributes):
        made = [name, dict(attributes), ""]
        self.all.append(made)
        if name not in VOID:
            self.open.append(made)

    def handle_startendtag(self, name, attributes):
        self.all.append([name, dict(attributes), ""])

    def handle_endtag(self, name):
        assert self.open.pop()[0] == name

    def handle_data(self, text):
        for one in self.open:
            one[2] += text

    def named(self, *names):
        return [one for one in self.all if one[0] in names]


@pytest.fixture(scope="module")
def found():
    return report(default_population())


@pytest.fixture(scope="module")
def page(found):
    return to_html(found)


@pytest.fixture(scope="module")
def tree(page):
    return Tree(page)


def tables(text):
    """Rows of cells, by caption."""
    out = {}
    for one in re.findall(r"<table>.*?</table>", text, re.S):
        inside = Tree(one)
        rows = [
            [cell[2] for cell in Tree(row).named("th", "td")]
            for row in re.findall(r"<tr>.*?</tr>", one, re.S)
        ]
        out[inside.named("caption")[0][2]] = rows
    return out


def block(text, name):
    """A block of code by its name."""
    (one,) = (x for x in Tree(text).named("pre") if x[1]["aria-label"] == name)
    return one[2]


def test_tells_the_yields_of_the_population(found, page):
    rows = next(rows for caption, rows in tables(page).items() if "and [X/Fe]" in caption)
    assert [row[0] for row in rows[1:]] == list(CHOICE)
    fresh = default_population().weigh(["13.8 Gyr"])
    for row in rows[1:]:
        value, error, power = re.fullmatch(
            r"\(([0-9.]+) ± ([0-9.]+)\) × 10(−?[0-9]+)(?: \([a-z]\))?", row[4]
        ).groups()
        unit = 10 ** float(power.replace("−", "-"))
        last = 10.0 ** -len(value.partition(".")[2]) * unit
        assert float(value) * unit == pytest.approx(fresh.get(row[0])[0], abs=0.51 * last)
        assert float(error) * unit == pytest.approx(found.errors.get(row[0])[0], abs=0.51 * last)
        if row[0] != "Fe":
            ratio = float(row[5].split(" ")[0].replace("−", "-"))
            assert ratio == pytest.approx(fresh.ratio(row[0], "Fe")[0], abs=0.0051)
    budget = next(rows for caption, rows in tables(page).items() if caption.startswith("Where 1 Msun"))
    assert sum(float(row[1]) for row in budget[1:]) == pytest.approx(1, abs=3e-4)


def test_holds_choices_findings_swaps_models_and_papers(found, page, tree):
    sets = ["karakas-2010", "doherty-2014", "kobayashi-2006", "nomoto-1997-w7"]
    assert [one.id for one, _ in found.findings] == sets
    every = tables(page)
    for one, findings in found.findings:
        rows = every.get(f"Findings in {one.id}", [[]])[1:]
        assert (
            [row[3] for row in rows]
            == [f.explanation for f in one.audit()]
            == [f.explanation for f in findings]
        )
    contrast = next(rows for caption, rows in every.items() if "with another choice" in caption)
    named = {row[0].partition(":")[0] for row in contrast[1:-2]}
    assert named == set(USUAL)
    # a steeper mass function makes less oxygen: Salpeter (1955) has more mass in low-mass stars than Kroupa (2001)
    salpeter = next(row for row in contrast if row[0] == "imf: salpeter-1955")
    assert float(salpeter[3].replace("−", "-")) < -0.1
    links = [one[1]["href"] for one in tree.named("a")]
    # DOIs of Karakas (2010), Kobayashi et al. (2006), Kroupa (2001): from memory
    for doi in ("10.1111/j.1365-2966.2009.16198.x", "10.1086/508914", "10.1046/j.1365-8711.2001.04022.x"):
        assert f"https://doi.org/{doi}" in links


def test_a_finding_has_a_part_where_its_model_has(found):
    (agb,) = (findings for one, findings in found.findings if one.id == "karakas-2010")
    # at Z = 0.014 the slices on either side are 0.008 and 0.02
    for one in agb:
        if one.metallicity in (0.0001, 0.004):
            assert not found.weighs_in(one)
        if one.metallicity is None:
            assert found.weighs_in(one)


def test_can_be_made_again_from_itself(page, found):
    import tomllib

    stars = population_from_dict(tomllib.loads(block(page, "Population file")))
    assert np.array_equal(stars.weigh().total, found.result.total)
    assert to_html(report(stars)) == page
    for one in found.population.prepared.sets:
        assert [one.id, one.checksum] in tables(page)["Yield sets and the SHA-256 of their figures"]


def test_needs_nothing_beside_it(page, tree):
    assert not tree.named("script", "img", "iframe", "object", "embed", "base")
    assert not any(
        key.startswith("on") or key in ("src", "srcset") for _, given, _ in tree.all for key in given
    )
    for name, given, _ in tree.all:
        target = given.get("href", given.get("xlink:href", ""))
        local = target.startswith(("#", "data:"))
        assert local or not target or (name == "a" and target.startswith("https://doi.org/"))
    assert "@import" not in page and not re.search(r"url\((?!#)", page)


def test_is_built_for_keys_and_screen_readers(tree):
    assert tree.named("html")[0][1]["lang"] == "en"
    ids = [given["id"] for _, given, _ in tree.all if "id" in given]
    assert len(ids) == len(set(ids))
    for _, given, _ in tree.all:
        for target in (
            given.get("aria-labelledby"),
            given.get("href", "x")[1:] if given.get("href", "")[:1] == "#" else None,
        ):
            assert target is None or target in ids
    first = next(one for one in tree.all if one[0] == "a")
    assert first[1]["class"] == "skip" and first[1]["href"] == "#report"
    levels = [int(one[0][1]) for one in tree.named("h1", "h2", "h3", "h4")]
    assert levels[0] == 1 and levels.count(1) == 1
    assert all(b - a <= 1 for a, b in pairwise(levels))
    assert len(tree.named("main")) == len(tree.named("nav")) == 1
    assert len(tree.named("caption")) == len(tree.named("table")) > 5
    assert all(one[1]["scope"] in ("row", "col") for one in tree.named("th"))
    drawings = tree.named("svg")
    assert len(drawings) == 5
    assert all(one[1]["role"] == "img" and one[1]["aria-labelledby"].endswith("-title") for one in drawings)
    for _, given, _ in tree.all:
        if given.get("class") == "scroll":
            assert given["tabindex"] == "0" and given["role"] == "region" and given["aria-label"]


def luminance(colour):
    """Relative luminance of WCAG 2.1."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [x / 12.92 if x <= 0.04045 else ((x + 0.055) / 1.055) ** 2.4 for x in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def test_colours_stand_out(page):
    # WCAG 2.1, 1.4.3: at least 4.5 to 1
    palettes = re.findall(r":root \{(.*?)\}", page, re.S)
    assert len(palettes) == 3
    for one in palettes:
        colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", one))
        for ink in ("ink", "quiet", "link"):
            for ground in ("paper", "block"):
                a, b = sorted((luminance(colours[ink]), luminance(colours[ground])))
                assert (b + 0.05) / (a + 0.05) >= 4.5


def test_what_a_user_names_is_text():
    bad = "<img src=x onerror=alert(1)>\"'&"
    late = DelayedSource(bad, ["nomoto-1997-w7"], 1e-3, "maoz-graur-2017")
    stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"]), late], species=["O", "Fe"])
    with made_by(f"report {bad}"):
        tree = Tree(to_html(report(stars)))
    assert not tree.named("img")
    assert bad in "".join(one[2] for one in tree.named("td", "th"))
    assert not any(key.startswith("on") for _, given, _ in tree.all for key in given)


def test_stated_errors_and_swaps_are_told():
    stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], ages=["1 Gyr"])
    stated = Spread([StatedError(0.3, set="kobayashi-2006", elements=["O"])])
    found = report(stars, ["O", "Fe"], stated, {"imf": "salpeter-1955"})
    page = to_html(found)
    assert "Nobody has stated errors" not in page
    assert block(page, "Stated errors") == stated.to_toml()
    rows = next(r for c, r in tables(page).items() if "and [X/Fe]" in c)
    assert "±" in rows[1][1] and "±" not in rows[2][1]
    contrast = next(rows for caption, rows in tables(page).items() if "with another choice" in caption)
    assert [row[0] for row in contrast[1:-2]] == ["imf: salpeter-1955"]


def test_nuclides_without_their_elements():
    stars = Population(0.02, [StellarSource("agb", ["karakas-2010"])], species=["C12", "C13"])
    page = to_html(report(stars))
    assert [row[0] for row in next(r for c, r in tables(page).items() if "and [X/Fe]" in c)[1:]] == [
        "12C",
        "13C",
    ]


def test_the_young_have_tables_without_figures():
    stars = Population(
        0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"], ages=["1 Myr"]
    )
    page = to_html(report(stars))
    assert page.count("Not drawn: ") >= 2 and "<table>" in page


def test_refuses_what_tells_nothing():
    stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], ages=[0.0])
    with pytest.raises(InputError, match="nothing is ejected at age 0"):
        report(stars)
    with pytest.raises(InputError):
        report(default_population(), ["Xx"])
    with pytest.raises(InputError, match="isn't known"):
        report(default_population(), swaps={"immf": "salpeter-1955"})


def test_swaps_that_a_population_cannot_take_are_told():
    explosions = StellarSource("core-collapse", ["kobayashi-2006"])
    stars = Population(0.02, [explosions], edges=Edges(metallicity="refuse"), species=["O", "Fe"])
    swaps, refused = usual_swaps(stars)
    # the models of Limongi & Chieffi (2018) end at Z = 0.01345
    assert "core-collapse" not in swaps and len(refused) == 1
    assert refused[0].startswith("core-collapse isn't swapped for limongi-chieffi-2018-R-v000: ")
    assert refused[0] in Tree(to_html(report(stars))).named("main")[0][2]


def test_a_page_is_written_whole_or_not_at_all(found, tmp_path):
    path = tmp_path / "report.html"
    path.write_text("before")
    with pytest.raises(InputError):
        write_html(found, tmp_path / "nowhere" / "report.html")
    write_html(found, path)
    assert path.read_text().endswith("</html>\n") and [p.name for p in tmp_path.iterdir()] == ["report.html"]


BROWSER = shutil.which("chromium")
FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
    "--enable-logging=stderr",
]  # fmt: skip
#: what the page itself may not do: tell how wide it came out
MEASURE = """<script>
addEventListener("load", () => {
  const root = document.documentElement;
  parent.document.body.title = "widths " + [innerWidth, root.scrollWidth, document.body.scrollWidth].join();
});
</script></body>"""


def browse(path, width, folder, *flags):
    return subprocess.run(
        [BROWSER, *FLAGS, f"--user-data-dir={folder}", f"--window-size={width},900", *flags, path.as_uri()],
        capture_output=True, text=True, timeout=120, check=True,
    )  # fmt: skip


@pytest.mark.skipif(BROWSER is None, reason="no Chromium")
@pytest.mark.parametrize("width", [390, 1280])
def test_a_browser_shows_it(page, tmp_path, width):
    path = tmp_path / "report.html"
    path.write_text(page, encoding="utf-8")
    shown = browse(path, width, tmp_path / "a", f"--screenshot={tmp_path / 'shot.png'}")
    assert (tmp_path / "shot.png").stat().st_size > 10_000
    assert "CONSOLE" not in shown.stderr
    # the same page, allowed to measure itself
    freed = re.sub(r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", page)
    assert freed != page
    # in a frame, which may be narrower than a window
    inside = escape(freed.replace("</body>", MEASURE))
    frame = f'<iframe srcdoc="{inside}" style="border: 0; width: {width}px; height: 900px"></iframe>'
    path.write_text(f'<!DOCTYPE html><meta charset="utf-8"><body>{frame}</body>', encoding="utf-8")
    measured = re.search(r'title="widths ([0-9,]+)"', browse(path, 1400, tmp_path / "b", "--dump-dom").stdout)
    inner, root, body = map(int, measured[1].split(","))
    assert inner == width and root <= width and body <= width


@pytest.mark.skipif(BROWSER is None, reason="no Chromium")
def test_the_browser_would_tell_of_an_error(page, tmp_path):
    path = tmp_path / "report.html"
    path.write_text(page.replace("</body>", "<script>1</script></body>"), encoding="utf-8")
    assert "CONSOLE" in browse(path, 390, tmp_path / "a", "--dump-dom").stderr
