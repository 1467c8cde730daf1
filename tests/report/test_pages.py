import html
import re
from dataclasses import replace
from html.parser import HTMLParser

import pytest
from figures.made_records import make_measurement, make_prediction
from report.made_study import make_image, make_summary

from layerscan.errors import InputError, SettingsError
from layerscan.figures.measurement import draw_measurement
from layerscan.figures.prediction import draw_prediction
from layerscan.records import Agreement, Comparison, Reason
from layerscan.report import cards
from layerscan.report.cautions import CAUTIONS
from layerscan.report.page import Chain, render_page, write_page
from layerscan.report.study_figures import write_study_figures
from layerscan.report.study_page import examples, render_study_page, safe_link, write_study_page
from layerscan.report.svg import inline_svg
from layerscan.report.words import anchor, check_swatch, percent

ATTACKS = (
    "<script>document.title='owned'</script>",
    '"><img src=x onerror="document.title=\'owned\'">',
    "'><svg/onload=document.title='owned'>",
    "</title></style></svg><iframe srcdoc='<script>parent.document.title=1</script>'>",
    "{{ 7*7 }}{% raw %}",
    "javascript:alert(1)//\x00\x1b",
)


def make_chain(name="shell_03.tif", *, text=""):
    measurement, micrograph = make_measurement(path=f"{name}{text}")
    prediction = make_prediction()
    comparison = Comparison(
        version="0", settings={}, flags=("observed_uncertainty_unknown",), peak_difference_nm=47.0,
        u_peak_difference_nm=6.1, fwhm_difference_nm=1.0, rms=0.1, delta_e00=23.4,
        agreement=Agreement(
            statistic=7.7, p_value=1e-9, conclusion="contradicts", passing_peak_range_nm=(533.0, 557.0)
        ),
        reasons=(
            Reason(parameters=(f"scale of all thicknesses{text}",), values=(0.914,), u=(0.011,),
                   prior=(f"shrinkage{text}",), evidence=38.2, indistinguishable_from=(f"index{text}",)),
        ),
        sentence=f"The imaged structure does not explain the observed reflectance.{text}",
    )  # fmt: skip
    svg = draw_prediction(prediction)
    return Chain(
        name=f"{name}{text}", intro=f"Invented.{text}", measurement=measurement,
        measurement_svg=draw_measurement(measurement, micrograph),
        predictions=((f"Predicted light{text}", prediction, svg),),
        comparisons=((f"Observed{text}", comparison, svg),),
    )  # fmt: skip


@pytest.fixture(scope="module")
def page():
    nothing, micrograph = make_measurement(layered=False)
    bare = Chain(name="none.tif", measurement=nothing, measurement_svg=draw_measurement(nothing, micrograph))
    return render_page([make_chain(), bare], title="layerscan demo", intro="All data are invented.\n\nSecond.")


@pytest.fixture(scope="module")
def study():
    return render_study_page(make_summary())


class Reader(HTMLParser):
    """Collects what the tests ask of a page."""

    VOID = frozenset({"meta", "br", "img", "input", "hr", "link"})

    def __init__(self, text):
        super().__init__()
        self.ids, self.links, self.headings, self.tags, self.open, self.broken = [], [], [], [], [], []
        self.attributes = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        values = dict(attrs)
        self.tags.append(tag)
        self.attributes += [(tag, name, value) for name, value in attrs]
        if "id" in values:
            self.ids.append(values["id"])
        if values.get("href", "").startswith("#") and tag == "a":
            self.links.append(values["href"][1:])
        if re.fullmatch("h[1-6]", tag):
            self.headings.append(int(tag[1]))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in self.VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.broken.append(tag)


@pytest.mark.parametrize("which", ["page", "study"])
def test_page_is_well_formed_and_accessible(which, request):
    # HTML: ids are unique, links meet their targets
    # WCAG 2.2: headings in order (1.3.1), language (3.1.1), names of drawings (1.1.1), scope of header cells (1.3.1)
    text = request.getfixturevalue(which)
    reader = Reader(text)
    assert not reader.broken
    assert not reader.open
    assert len(set(reader.ids)) == len(reader.ids)
    assert set(reader.links) <= set(reader.ids)
    assert reader.headings[0] == 1
    assert reader.headings.count(1) == 1
    assert all(b <= a + 1 for a, b in zip(reader.headings, reader.headings[1:], strict=False))
    assert ("html", "lang", "en") in reader.attributes
    header_cells = reader.tags.count("th")
    assert sum(tag == "th" and name == "scope" for tag, name, _ in reader.attributes) == header_cells
    assert reader.tags.count("table") == reader.tags.count("caption")
    drawings = re.findall(r"<svg[^>]*>", text)
    assert all('role="img"' in tag or 'aria-hidden="true"' in tag for tag in drawings)


@pytest.mark.parametrize("which", ["page", "study"])
def test_page_fetches_and_runs_nothing(which, request):
    # content security policy of the page; and nothing that would need it
    text = request.getfixturevalue(which)
    assert "default-src 'none'" in text
    reader = Reader(text)
    assert not {"script", "iframe", "object", "embed", "link", "form", "base", "foreignobject"} & set(reader.tags)
    for tag, name, value in reader.attributes:
        assert not name.startswith("on")
        if name in ("src", "href", "xlink:href"):
            assert value.startswith(("#", "data:image/", "figures/")), (tag, value)
    assert not re.search(r"url\((?!#)|@import", text)


def test_page_answers_first_and_carries_the_cautions(page):
    for part in ("Lamellar period 86.10 ± 0.88 nm, n = 9", "dark layers 52.10 ± 0.55 nm, n = 10", "bright layers",
                 "main peak 545.0 ± 6.0 nm (order 1)", "does not explain", "What limits the answer", "pixel size",
                 "0.914 ± 0.011", "No obliquity of the section was stated", "All data are invented.",
                 "No layered structure was found"):  # fmt: skip
        assert part in page
    assert all(html.escape(caution) in page for caution in CAUTIONS)
    assert page.index("Lamellar period") < page.index("<figure")


def test_study_page_shows_what_the_issue_asks_for_in_its_order(study):
    order = ["summary", "overlays", "table", "light", "specimens", "statistics", "budget", "decisions", "failures",
             "run", "methods", "cautions"]  # fmt: skip
    places = [study.index(f'<section id="{name}"') for name in order]
    assert places == sorted(places)
    asked = {
        "summary": ["Do the lots differ?", "3.1 ± 1.5 nm larger", "images of 8 specimens", "pixel size"],
        "overlays": ["information banner", "Thickness against layer number", "unreadable", "No layered structure"],
        "table": ["CV %", "U, k = 2 (nm)", "specimens"],
        "light": ["order 1", "reflectance (0 to 1)", "It explains."],
        "specimens": ["1:1", "Agrees with 1:1.", "Thicker along the web."],
        "statistics": ["Welch", "no test possible", "REML", "at the boundary"],
        "decisions": ["guarded acceptance", "undecided", "ISO/IEC 17025"],
        "failures": ["unreadable"],
        "run": ["To run it again", "Settings of measure", "Fixation", "not stated"],
        "methods": ["10.1364/OE.19.024061", "layerscan 0.1.0", "typed", "corrected by hand"],
    }
    for name, parts in asked.items():
        section = study[study.index(f'<section id="{name}"') :]
        section = section[: section.index("</section>")]
        for part in parts:
            assert part in section, (name, part)
    assert "None" not in re.sub(r"<p>None\.</p>", "", re.sub(r"<svg.*?</svg>", "", study, flags=re.DOTALL))


def test_unfinished_study_says_so_on_top():
    text = render_study_page(make_summary(finished=False))
    assert text.index("This study is not finished") < text.index('id="summary"')


def test_nothing_in_a_name_becomes_markup(study):
    # OWASP Cross Site Scripting Prevention: every untrusted value is encoded for where it stands
    attack = "".join(ATTACKS)
    plain, attacked = Reader(study), Reader(render_study_page(make_summary(text=attack)))
    assert attacked.tags == plain.tags
    assert [a[:2] for a in attacked.attributes] == [a[:2] for a in plain.attributes]


def test_nothing_in_the_demo_page_becomes_markup():
    attack = "".join(ATTACKS)
    text = render_page([make_chain(text=attack)], title=f"t{attack}", intro=attack)
    assert Reader(text).tags == Reader(render_page([make_chain()], title="t", intro="x")).tags
    assert "{{ 7*7 }}" in html.unescape(text)  # no template runs inside a value


@pytest.mark.parametrize(
    "svg",
    [
        '<svg xmlns="http://www.w3.org/2000/svg"><script>alert(1)</script><g onload="alert(1)"/></svg>',
        '<svg xmlns="http://www.w3.org/2000/svg"><foreignObject><b xmlns="http://www.w3.org/1999/xhtml">x</b></foreignObject></svg>',
        '<svg xmlns="http://www.w3.org/2000/svg"><image href="https://example.org/a.png"/></svg>',
        '<svg xmlns="http://www.w3.org/2000/svg"><use href="data:image/svg+xml;base64,AAAA"/></svg>',
        '<svg xmlns="http://www.w3.org/2000/svg"><rect style="fill:url(https://example.org/x)"/></svg>',
        '<svg xmlns="http://www.w3.org/2000/svg"><style>@import "x"</style><a href="javascript:alert(1)"/></svg>',
    ],
)
def test_figures_from_outside_keep_only_their_drawing(svg):
    clean = inline_svg(svg, prefix="p")
    assert not re.search(r"script|onload|foreignObject|https|javascript|import|svg\+xml", clean.split(">", 1)[1])


@pytest.mark.parametrize("svg", ["", "<html></html>", "<svg", '<!DOCTYPE svg [<!ENTITY a "b">]><svg/>', "<svg></svg>"])
def test_what_is_no_drawing_is_refused(svg):
    with pytest.raises(InputError, match="figure"):
        inline_svg(svg, prefix="p")


def test_figure_keeps_its_drawing_and_its_names():
    svg = draw_prediction(make_prediction())
    clean = inline_svg(svg, prefix="p")
    assert clean.count("<path") == svg.count("<path")
    label = re.search(r'aria-labelledby="(\S+) (\S+)"', clean)
    assert f'id="{label.group(1)}"' in clean
    assert f'id="{label.group(2)}"' in clean


@pytest.mark.parametrize("code", ["red", "#12345", "#12345g", "#123456;background:url(x)", "#0000000"])
def test_swatch_is_a_colour_or_refused(code):
    colour = replace(make_prediction().colour, srgb=code)
    with pytest.raises(InputError, match="no '#rrggbb'"):
        check_swatch(colour)


@pytest.mark.parametrize(
    ("path", "link"),
    [("figures/a b.svg", "figures/a%20b.svg"), ("/etc/passwd", None), ("../x.svg", None), ("a\\..\\b", None),
     ("javascript:alert(1)", None), ("a\nb", None), ('a"b.svg', "a%22b.svg"), (None, None), ("", None)],
)  # fmt: skip
def test_links_stay_beside_the_page(path, link):
    assert safe_link(path) == link


@pytest.mark.parametrize(
    ("share", "text"),
    [(None, "not known"), (1.0, "100 %"), (0.5, "50 %"), (0.0316, "3.2 %"), (0.0, "0 %"), (0.9987, "99.87 %"),
     (0.999999, "above 99.99 %")],
)  # fmt: skip
def test_shares_never_round_to_certainty(share, text):
    # rule of the project: no false precision, and nothing uncertain is shown as certain
    assert percent(share) == text


def test_anchors_are_unique_and_plain():
    names = ["a b", "a-b", "ä", "", "\ud800"]
    assert len({anchor(name) for name in names}) == len(names)
    assert all(re.fullmatch(r"[a-z0-9-]+", anchor(name)) for name in names)


def test_thousand_images_stay_usable():
    # issue: 1,000 images under 30 MB
    summary = make_summary(images=1000)
    text = render_study_page(summary)
    assert len(text.encode()) < 30_000_000
    assert text.count("<article") == 1000 + 12
    assert "All images" in text


def test_examples_take_every_group_in_turn():
    images = [make_image(n, group="AB"[n >= 500], specimen="s", layers=2) for n in range(600)]
    chosen = examples(images)
    assert len(chosen) == 12
    assert [image.group for image in chosen[:4]] == ["A", "B", "A", "B"]


def test_traces_are_thinned_to_what_a_page_can_hold():
    image = make_image(1, group="A", specimen="s")
    full, thin = (str(cards.overlay_picture(image, most_points=n)) for n in (10_000, 100))
    assert len(thin) < len(full)
    assert "3 of them" not in full
    assert "1 of them doubtful" in full


def test_pictures_of_other_kinds_are_left_out():
    image = make_image(1, group="A", specimen="s")
    other = replace(image, thumbnail=replace(image.thumbnail, media_type="image/svg+xml"))
    assert cards.overlay_picture(other, most_points=100) == ""


def test_page_is_complete_or_absent(tmp_path):
    write_study_page(tmp_path / "report.html", make_summary(images=2))
    write_page(tmp_path / "page.html", [], title="nothing")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["page.html", "report.html"]
    with pytest.raises(OSError, match="missing"):
        write_page(tmp_path / "missing" / "page.html", [], title="nothing")


def test_study_figures_leave_as_files(tmp_path):
    # on request: every figure of the page as a file; only the formats that were asked for
    summary = make_summary(images=1)
    files = write_study_figures(tmp_path / "figures", replace(summary, light=summary.light[:2]), suffixes=(".pdf",))
    assert [file.name for file in files] == [
        "specimens.pdf", "one_to_one.pdf", "drift_1.pdf", "spectrum_1.pdf", "spectrum_2.pdf"
    ]  # fmt: skip
    assert all(file.read_bytes().startswith(b"%PDF") for file in files)
    with pytest.raises(SettingsError, match=r"\.docx"):
        write_study_figures(tmp_path, summary, suffixes=(".docx",))


def test_empty_study_can_be_shown():
    # every optional part may be absent
    summary = make_summary(images=1)
    empty = replace(
        summary, question=None, answer_limits=(), design=(), table=(), groups=(), specimens=(), images=(), variance=(),
        tests=(), sensitivity=(), drift=(), planning=(), light=(), peaks=(), line=None, budget=(), limited_by=None,
        decisions=(), failures=(), facts=(), flags=(), methods=replace(summary.methods, optics=None, materials=()),
    )  # fmt: skip
    text = render_study_page(empty)
    assert "not known" in text
    assert not Reader(text).broken
