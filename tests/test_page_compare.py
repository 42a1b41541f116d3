"""The page of a comparison, as text and in a browser."""

import dataclasses
import html.parser
import json
import re

import numpy as np
import pytest
import shapely

from converter.errors import OutputError
from converter.jobs.comparison import Compared
from converter.pages.base import embedded, figure
from converter.pages.compare import write_page
from converter.pages.picture import Picture, extremes, segments, thinned
from geometry.polyline import Polyline
from geometry.signed import signed_distances
from tests import browser
from tests.comparisons import LIMITS, bumped, circle, comparison_of, plate, revised

VOID = {"meta", "link", "input", "br", "img"}
needs_browser = pytest.mark.skipif(browser.found() is None, reason="no Chromium is installed")


class Reader(html.parser.HTMLParser):
    """Elements, their text and whether every one is closed in its place."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.open, self.said = [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.said.append(((self.open or [""])[-1], data))

    def all(self, tag, name=None):
        return [a for t, a in self.elements if t == tag and (name is None or name in (a.get("class") or "").split())]

    def text(self):
        return " ".join(" ".join(words for tag, words in self.said if tag not in ("script", "style")).split())

    def data(self):
        return json.loads(next(w for tag, w in self.said if tag == "script" and w.startswith("{")))


def page(comparison, path, **more):
    write_page(comparison, path, **more)
    return Reader(path.read_text(encoding="utf-8"))


def vertices(path):
    """Vertices of path data, one array for every part."""
    parts = []
    for part in path.split("M")[1:]:
        steps = np.array(re.findall(r"-?\d+", part), dtype=float).reshape(-1, 2)
        parts.append(np.cumsum(steps, axis=0))
    return parts


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    path = tmp_path_factory.mktemp("page") / "map.html"
    return path, page(revised(), path)


def test_the_verdict_stands_on_top_and_the_caution_at_the_foot(written):
    said = written[1].text()
    verdict = "OUT OF +-0.2 mm: 1 of 2 profiles in 2 zones: B0, and 2 profiles without a partner"
    places = [said.index(words) for words in (verdict, "OLD old.dxf", "Zones out of tolerance", "Before cutting")]
    assert places == sorted(places)


def test_nothing_is_fetched(written):
    text = written[0].read_text(encoding="utf-8")
    assert set(re.findall(r"""(?:src|href)\s*=\s*["']([^"']*)""", text)) == {"data:,", "#content"}
    assert re.findall(r"https?://[^\"'\s)]*", text) == ["http://www.w3.org/2000/svg"]  # the name of SVG, not a place
    assert not re.search(r"@import|url\((?!#)|fetch\(|XMLHttpRequest|<(?:img|iframe|object|embed|base)\b", text)
    policy = [a["content"] for a in written[1].all("meta") if a.get("http-equiv") == "Content-Security-Policy"]
    assert policy[0].startswith("default-src 'none'")


def test_zones_and_figures_are_those_of_the_record(written):
    comparison, said = revised(), written[1].text()
    for pair in comparison.record.pairs:
        for value in (pair.deviation.certified, pair.deviation.measured, pair.deviation.in_order, pair.deviation.rms):
            assert figure(value) in said
        for value in (pair.deviation.mean_signed, pair.deviation.max_plus, pair.deviation.max_minus):
            assert figure(value, True) in said
    data = written[1].data()
    zones = sorted((z for p in comparison.record.pairs for z in p.zones), key=lambda z: -abs(z.peak))
    assert [zone["peak"] for zone in data["zones"]] == [zone.peak for zone in zones]
    assert [zone["x"] + data["x"] for zone in data["zones"]] == pytest.approx([zone.x for zone in zones], abs=1e-12)
    assert len(written[1].all("button", "go")) == len(zones) == len(written[1].all("g", "mark"))


def test_lines_of_the_map_lie_within_the_distance_it_states(written):
    comparison, reader = revised(), written[1]
    stated = float(re.search(r"its lines lie within ([\d.e-]+) mm", reader.text()).group(1))
    assert stated < 120.0 / 50_000.0  # room for close looks

    data = reader.data()
    drawn = [vertices(a["d"]) for a in reader.all("path", "new") if "d" in a and "l" in a["d"]]
    parts = [part / [data["scale"], -data["scale"]] + [data["x"], data["y"]] for group in drawn for part in group]
    shapes = shapely.MultiLineString([part for part in parts if len(part) > 1])
    for pair in comparison.pairs:
        dense = pair.new.flatten(1e-5).points
        assert shapely.distance(shapes, shapely.points(dense)).max() < stated * 1.001
    for part in parts:
        off = np.min([np.abs(signed_distances(part, pair.new, 1e-6)) for pair in comparison.pairs], axis=0)
        assert off.max() < stated * 1.001


def test_samples_reach_every_peak(written):
    comparison, data = revised(), written[1].data()
    for pair, shown in zip(comparison.pairs, data["pairs"], strict=True):
        assert min(shown["d"]) == pytest.approx(pair.course.deviation.min(), rel=1e-4)
        assert max(shown["d"]) == pytest.approx(pair.course.deviation.max(), rel=1e-4)
        places = np.stack([shown["x"], shown["y"]], axis=1) + np.array([data["x"], data["y"]])
        np.testing.assert_allclose(signed_distances(places, pair.new, 1e-6), 0.0, atol=1e-4)
    assert data["limits"] == [-0.2, 0.2]


def test_large_outlines_make_small_pages(tmp_path):
    t = np.linspace(0.0, 2.0 * np.pi, 100_000, endpoint=False)
    radius = 500.0 + 60.0 * np.sin(5.0 * t) + 0.004 * np.random.default_rng(1).normal(size=(2, len(t)))
    old, new = (Polyline(np.stack([r * np.cos(t), r * np.sin(t)], axis=1), True) for r in radius)
    path = tmp_path / "map.html"
    reader = page(comparison_of([(old, new)], LIMITS), path)
    assert path.stat().st_size < 1_000_000
    assert re.search(r"The map shows \d+ of 200\d{3} vertices", reader.text())
    assert len(reader.data()["pairs"][0]["a"]) <= 2 * 1000 + 2


def test_many_profiles(tmp_path):
    comparison = comparison_of([(circle(0.0, 0.0, 10.0), circle(0.3, 0.0, 10.0))], LIMITS)
    (one,) = comparison.pairs
    for k in range(1, 300):  # the same pair again elsewhere
        by = np.array([30.0 * (k % 20), 30.0 * (k // 20)])
        course = dataclasses.replace(one.course, points=one.course.points + by)
        zones = [dataclasses.replace(z, x=z.x + by[0], y=z.y + by[1]) for z in one.record.zones]
        record = dataclasses.replace(one.record, old_id=f"A{k}", new_id=f"B{k}", zones=zones)
        comparison.pairs.append(Compared(one.old.moved(by), one.new.moved(by), course, record))
    comparison.record.pairs = [pair.record for pair in comparison.pairs]
    path = tmp_path / "map.html"
    reader = page(comparison, path)
    assert path.stat().st_size < 2_000_000
    assert len(reader.all("option")) == 300
    assert len(reader.all("g", "mark")) == 60
    assert "zones the 60 with the highest peaks are numbered" in reader.text()
    assert max(len(pair["a"]) for pair in reader.data()["pairs"]) < 120


HOSTILE = ["</script><img src=x onerror=alert(1)>", "a\"b'c<d>&e;{{7*7}}{% raw %}", "]]><!--", "\u2028\u2029\udce4\x00"]


@pytest.mark.parametrize("name", HOSTILE)
def test_names_are_only_ever_text(tmp_path, name):
    comparison = comparison_of([(plate(), bumped(plate(), 60.0, 0.5, 12.0))], LIMITS, names=(name, name), layer=name)
    comparison.record.pairs[0].old_id = name
    comparison.record.warnings = [name]
    comparison.record.pairs[0].warnings = [name]
    plain = page(revised(), tmp_path / "plain.html")
    path = tmp_path / "map.html"
    reader = page(comparison, path)
    kinds = {tag for tag, _ in reader.elements}
    assert kinds <= {tag for tag, _ in plain.elements} | {"ul", "li"}
    assert not any(key.startswith("on") for _, attributes in reader.elements for key in attributes)
    assert len(reader.all("script")) == 2
    assert "e;49" not in path.read_text(encoding="utf-8")
    if name.isprintable():
        assert " ".join(name.split()) in reader.text()
        assert reader.data()["pairs"][0]["name"].startswith(name)


def test_embedded_json_is_safe_and_whole():
    data = {"a": "</script>&<!--\u2028", "b": [1.5, float("nan"), float("inf")]}
    text = str(embedded(data))
    assert not set("<>&\u2028") & set(text)
    assert json.loads(text) == {"a": data["a"], "b": [1.5, None, None]}


@pytest.mark.parametrize(
    ("value", "signed", "text"),
    [
        (0.123456, False, "0.1235"),
        (-0.5, True, "\u22120.5"),
        (0.5, True, "+0.5"),
        (None, False, "\u2013"),
        (0.0, True, "0"),
        (np.inf, False, "\u2013"),
    ],
)
def test_figures(value, signed, text):
    assert figure(value, signed) == text


def test_without_a_tolerance_there_is_no_verdict(tmp_path):
    reader = page(revised(limits=None), tmp_path / "map.html")
    assert "No tolerance was stated, so there is no verdict" in reader.text()
    assert reader.all("section", "open")
    assert reader.data()["limits"] is None
    assert "out of tolerance" not in reader.text()


def test_within(tmp_path):
    reader = page(comparison_of([(plate(), plate())], LIMITS), tmp_path / "map.html")
    assert "WITHIN +-0.2 mm: 1 profile compared" in reader.text()
    assert not reader.all("button", "go")


def test_nothing_paired(tmp_path):
    reader = page(
        comparison_of([], LIMITS, only_old=[plate()], only_new=[circle(0.0, 0.0, 5.0)]), tmp_path / "map.html"
    )
    assert "Profiles without a partner" in reader.text()
    assert len(reader.all("path", "only-old")) == 2  # the profile and the legend


def test_space_is_shown_in_plan(tmp_path):
    t = np.linspace(0.0, 6.0, 200)
    old = Polyline(np.stack([10 * np.cos(t), 10 * np.sin(t), t], axis=1))
    reader = page(
        comparison_of([(old, Polyline(old.points + np.array([0.0, 0.0, 0.5])))], LIMITS), tmp_path / "map.html"
    )
    assert "shown in plan" in reader.text()
    assert reader.data()["pairs"][0]["space"]


def test_the_output_is_guarded(tmp_path):
    path = tmp_path / "map.html"
    page(comparison_of([(plate(), plate())]), path)
    with pytest.raises(OutputError, match="exists already"):
        write_page(comparison_of([(plate(), plate())]), path)


@pytest.mark.parametrize("seed", range(5))
def densely(path, parts):
    """Points on the edges of a path, shape (n, 2)."""
    share = np.linspace(0.0, 1.0, parts, endpoint=False)[None, :, None]
    return (path[:-1, None] * (1.0 - share) + path[1:, None] * share).reshape(-1, 2)


@pytest.mark.parametrize("seed", range(4))
def test_thinned_paths_lie_within_their_distance(seed):
    random = np.random.default_rng(seed)
    points = np.cumsum(random.normal(size=(1500, 2)), axis=0) + 1e6
    curve = Polyline(points, bool(seed % 2))
    picture = Picture.around(points.min(axis=0), points.max(axis=0))
    found = thinned([curve], picture)
    (part,) = vertices(found.paths[0])
    back = part / [picture.scale, -picture.scale] + np.array([picture.x, picture.y])
    lines = [shapely.LineString(back), shapely.LineString(curve.path())]
    for line, path in zip(lines, (curve.path(), back), strict=True):
        assert shapely.distance(line, shapely.points(densely(path, 20))).max() <= found.distance
    assert found.drawn == len(part) <= found.vertices


def test_thinning_goes_on_until_the_page_is_small():
    random = np.random.default_rng(3)
    curves = [Polyline(random.uniform(size=(1000, 2))) for _ in range(100)]
    picture = Picture.around(np.zeros(2), np.ones(2))
    found = thinned(curves, picture)
    assert found.drawn <= 60_000
    assert found.distance > 2.0 / 4000.0


def test_few_vertices_are_drawn_closely_and_many_as_they_are_seen():
    t = np.linspace(0.0, 2.0 * np.pi, 100_000, endpoint=False)
    rough = 1.0 + 2e-5 * np.random.default_rng(4).normal(size=len(t))
    smooth, jagged = (
        Polyline(np.stack([r * np.cos(t), r * np.sin(t)], axis=1), True) for r in (np.ones(len(t)), rough)
    )
    picture = Picture.around(-np.ones(2), np.ones(2))
    assert thinned([smooth], picture).distance < 2.0 / 50_000.0
    found = thinned([jagged], picture)
    assert 2.0 / 50_000.0 < found.distance < 2.0 / 3900.0
    assert found.drawn <= 24_000


def test_segments_are_separate_lines():
    picture = Picture.around(np.zeros(2), np.array([4.0, 4.0]))
    path = segments(np.array([[0.0, 0.0], [1.0, 4.0]]), np.array([[1.0, 1.0], [1.0, 0.0]]), picture)
    assert path == "M0 400000l100000 -100000M100000 0l0 400000"


def test_extremes_keep_what_a_chart_must_show():
    along = np.linspace(0.0, 10.0, 10_001)
    values = np.zeros(10_001)
    values[[1234, 5678]] = 3.0, -2.0
    rows = extremes(along, values, 50, np.array([7.77712]))
    assert {0, 1234, 5678, 7777, 10_000} <= set(rows.tolist())
    assert len(rows) <= 2 * 50 + 3
    assert (np.diff(rows) > 0).all()


@pytest.fixture(scope="module")
def tab(tmp_path_factory):
    tab = browser.Browser(tmp_path_factory.mktemp("browser"))
    yield tab
    tab.close()


def view(tab):
    return [float(v) for v in tab.run("document.getElementById('map').getAttribute('viewBox')").split()]


def reading(tab):
    return tab.run("document.getElementById('readout').textContent")


def box(tab, query, index=0):
    """Left, top, width and height of an element on the screen."""
    found = f"document.querySelectorAll('{query}')[{index}].getBoundingClientRect()"
    return tab.run(f"(() => {{const b = {found}; return [b.x, b.y, b.width, b.height]}})()")


def middle(tab, query):
    x, y, width, height = box(tab, query)
    return x + width / 2.0, y + height / 2.0


@needs_browser
def test_hovering_and_the_chart_read_the_deviation(tab, written):
    tab.open(written[0])
    x, y, width, _ = box(tab, ".pair .old")
    tab.mouse("mouseMoved", x + width * 45.16 / 120.0, y + 2.0)  # the dent, 45.16 of 120 from the left, at the top
    assert re.search(r"deviation \u22120\.(3|299\d) mm inside, out of tolerance", reading(tab))
    assert "profile A0 to B0" in reading(tab)
    x, y, _, height = box(tab, ".pair .old", 1)
    tab.mouse("mouseMoved", x, y + height / 2.0)
    assert "profile A1 to B1" in reading(tab)
    assert tab.run("document.getElementById('profile').value") == "1"
    tab.mouse("mouseMoved", *middle(tab, "#strip"))
    along = float(re.search(r"along ([\d.]+) of 56\.", reading(tab)).group(1))
    assert 27.5 < along < 29.5  # the plot begins right of its numbers
    assert tab.run("document.querySelectorAll('#strip .now').length") == 1
    assert tab.errors == []
    assert tab.requests == [written[0].resolve().as_uri()]


@needs_browser
def test_zooming_moving_and_fitting(tab, written):
    tab.open(written[0])
    home = view(tab)
    x, y = middle(tab, "#map")
    tab.mouse("mouseWheel", x, y, deltaX=0, deltaY=-400)
    tab.settle()
    near = view(tab)
    assert near[2] < 0.6 * home[2]
    assert near[0] + near[2] / 2 == pytest.approx(home[0] + home[2] / 2, abs=0.01 * home[2])  # about the pointer
    tab.mouse("mousePressed", x, y, button="left", clickCount=1)
    tab.mouse("mouseMoved", x + 100, y + 50, button="left")
    tab.mouse("mouseReleased", x + 100, y + 50, button="left", clickCount=1)
    tab.settle()
    moved = view(tab)
    assert moved[2] == pytest.approx(near[2])
    assert moved[0] < near[0]
    assert moved[1] < near[1]
    tab.run("document.getElementById('map').focus()")
    tab.key("f")
    assert view(tab) == pytest.approx(home, abs=1.0)
    tab.key("+")
    assert view(tab)[2] == pytest.approx(home[2] / 1.5, rel=1e-3)
    tab.key("-")
    tab.key("-")
    assert view(tab)[2] == pytest.approx(home[2] * 1.5, rel=1e-3)
    tab.key("0")
    assert view(tab) == pytest.approx(home, abs=1.0)
    tab.key("ArrowRight", shift=True)
    assert view(tab)[0] > home[0]
    tab.click(*middle(tab, "#fit"))
    assert view(tab) == pytest.approx(home, abs=1.0)
    tab.click(*middle(tab, "#closer"))
    assert view(tab)[2] == pytest.approx(home[2] / 1.5, rel=1e-3)
    assert tab.errors == []


@needs_browser
def test_arrow_keys_step_along_the_profile(tab, written):
    tab.open(written[0])
    tab.run("document.getElementById('strip').focus()")
    tab.key("Home")
    assert "along 0 of" in reading(tab)
    tab.key("ArrowRight")
    first = float(re.search(r"along ([\d.]+) of", reading(tab)).group(1))
    assert 0.0 < first < 1.0
    tab.key("End")
    last = float(re.search(r"along ([\d.]+) of ([\d.]+)", reading(tab)).group(1))
    assert last > 360.0
    tab.key("ArrowRight")  # on through the start of a closed profile
    assert "along 0 of" in reading(tab)
    assert tab.run("document.getElementById('strip').getAttribute('aria-valuetext')").startswith("deviation")
    tab.run("document.getElementById('map').focus()")
    tab.key("ArrowRight")
    assert f"along {first:g} of" in reading(tab)
    assert tab.errors == []


@needs_browser
def test_zones_lead_to_their_places(tab, written):
    tab.open(written[0], calm=False)
    data = json.loads(tab.run("document.getElementById('data').textContent"))
    for k in (1, 0):
        zone = data["zones"][k]
        tab.run(f"document.querySelectorAll('.go')[{k}].click()")
        tab.run("new Promise(done => setTimeout(done, 450))")
        x, y, w, h = view(tab)
        assert x + w / 2 == pytest.approx(zone["x"] * data["scale"], abs=0.01 * w)
        assert y + h / 2 == pytest.approx(-zone["y"] * data["scale"], abs=0.01 * h)
        assert w < 200_000
        assert f"deviation {figure(zone['peak'], True)} mm" in reading(tab)
    assert tab.errors == []


@needs_browser
def test_switches(tab, written):
    tab.open(written[0])
    shown = "getComputedStyle(document.querySelector('{}')).display"
    for switch, query in (("whiskers", ".hairs"), ("numbers", "#marks")):
        assert tab.run(shown.format(query)) != "none"
        tab.click(*middle(tab, f"#{switch}"))
        assert tab.run(shown.format(query)) == "none"
    tab.run(
        "(() => {const c = document.getElementById('profile'); c.value = '1'; c.dispatchEvent(new Event('change'))})()"
    )
    assert "profile A1 to B1" in reading(tab)


CONTRAST = """(() => {
  const parse = text => text.match(/[\\d.]+/g).map(Number);
  const linear = v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4;
  const light = rgb => { const [r, g, b] = rgb.slice(0, 3).map(v => linear(v / 255));
    return 0.2126 * r + 0.7152 * g + 0.0722 * b; };
  let worst = [99, ""];
  for (const node of document.querySelectorAll("body *")) {
    const own = Array.from(node.childNodes).some(one => one.nodeType === 3 && one.textContent.trim());
    if (!own || node.closest("script, style, .skip") || !node.getClientRects().length) continue;
    const style = getComputedStyle(node);
    let ground = null;
    if (node.closest(".mark")) ground = getComputedStyle(node.closest(".mark").querySelector("circle")).fill;
    for (let up = node; !ground && up; up = up.parentElement) {
      const colour = getComputedStyle(up).backgroundColor;
      if (!/, 0\\)$/.test(colour)) ground = colour;
    }
    const text = node instanceof SVGElement ? style.fill : style.color;
    const [a, b] = [light(parse(text)), light(parse(ground || "rgb(255, 255, 255)"))].sort((p, q) => q - p);
    const ratio = (a + 0.05) / (b + 0.05);
    if (ratio < worst[0]) worst = [ratio, node.outerHTML.slice(0, 120)];
  }
  return worst;
})()"""


@needs_browser
@pytest.mark.parametrize("dark", [False, True])
@pytest.mark.parametrize("width", [1280, 360])
def test_text_stands_out_and_nothing_is_cut_off(tab, written, dark, width):
    tab.open(written[0], width=width, dark=dark)
    ratio, where = tab.run(CONTRAST)
    assert ratio >= 4.5, where  # WCAG 2.1, 1.4.3
    assert tab.run("document.documentElement.scrollWidth") <= width
    assert tab.errors == []


@needs_browser
def test_hostile_names_run_nothing(tab, tmp_path):
    name = HOSTILE[0]
    path = tmp_path / "map.html"
    comparison = comparison_of([(plate(), bumped(plate(), 60.0, 0.5, 12.0))], LIMITS, names=(name, name), layer=name)
    comparison.record.pairs[0].old_id = name
    page(comparison, path)
    tab.open(path)
    assert tab.run("document.images.length") == 0
    assert name in reading(tab)
    assert tab.errors == []
    assert tab.requests == [path.resolve().as_uri()]


@needs_browser
def test_printed_on_a4(tab, written, tmp_path):
    tab.open(written[0], dark=True)
    tab.pdf(tmp_path / "map.pdf")
    data = (tmp_path / "map.pdf").read_bytes()
    assert 1 <= len(re.findall(rb"/Type\s*/Page\b", data)) <= 2
    tab.media("print", dark=True)
    assert tab.run("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    assert tab.run("getComputedStyle(document.querySelector('.tools')).display") == "none"
