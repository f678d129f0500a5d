"""The report as a page: escaped, self-contained, readable by everyone, and worded as it must be."""

import re
from html.parser import HTMLParser

import numpy as np
import pytest

import tfstats as tfs
from tfstats.reporting.report_pages import markdown_text, methods_text, report_html

OVERRIDE = "\u202e"  # turns all text after it around
HOSTILE = {
    "script": "<script>alert(1)</script>",
    "quotes": "\"'><img src=x onerror=alert(2)>",
    "long": "a" * 300,
    "right to left": f"مرحبا {OVERRIDE}abc",
    "formula": r"$\frac{x}{y}$ & _ ^ #",
    "template": "{{ 7 * 7 }} {% raw %}",
    "markdown": "[x](http://example.org) `code` **b**",
}
VOID = {"meta", "br", "img", "link", "hr", "input"}


class Page(HTMLParser):
    """Elements, attributes and texts, and whether tags close in order."""

    def __init__(self, page):
        super().__init__(convert_charrefs=True)
        self.open, self.elements, self.texts, self.faults = [], [], [], []
        self.feed(page)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.faults.append(tag)

    def handle_data(self, data):
        self.texts.append(data)

    def all(self, tag):
        return [attributes for name, attributes in self.elements if name == tag]


@pytest.fixture(scope="module")
def study(make_study):
    return make_study()


@pytest.fixture(scope="module")
def page(study):
    return report_html(study)


@pytest.fixture(scope="module")
def hostile_study(make_study, make_maps):
    conditions = (HOSTILE["script"], HOSTILE["long"])
    channels = (HOSTILE["quotes"], HOSTILE["right to left"], HOSTILE["formula"])
    subjects = [HOSTILE["template"], HOSTILE["markdown"], *(f"S{number}" for number in range(7))]
    maps = make_maps(conditions, channels, subjects=subjects)
    return make_study(
        names=(HOSTILE["quotes"], HOSTILE["template"]), maps=maps, name=HOSTILE["script"],
        provenance={HOSTILE["script"]: {HOSTILE["quotes"]: HOSTILE["script"]}}, plan_text=HOSTILE["script"],
        cautions=(HOSTILE["script"],),
    )  # fmt: skip


def test_the_page_is_well_formed(page):
    parsed = Page(page)
    assert not parsed.faults and not parsed.open
    assert [tag for tag, _ in parsed.elements if tag == "h1"] == ["h1"]
    assert parsed.all("html")[0]["lang"] == "en"
    ids = [attributes["id"] for _, attributes in parsed.elements if "id" in attributes]
    assert len(ids) == len(set(ids))
    for attributes in parsed.all("a"):
        assert attributes["href"].startswith("#") and attributes["href"][1:] in ids
    for _, attributes in parsed.elements:
        for name in ("aria-labelledby", "aria-describedby"):
            assert attributes.get(name, ids[0]) in ids


def test_hostile_labels_stand_there_as_text(hostile_study):
    page = report_html(hostile_study)
    parsed = Page(page)
    assert not parsed.faults and not parsed.open
    assert not {tag for tag, _ in parsed.elements} & {"script", "img", "iframe", "object", "link", "base", "form"}
    assert not [name for _, attributes in parsed.elements for name in attributes if name.startswith("on")]
    said = " ".join("".join(parsed.texts).split())
    for label in HOSTILE.values():
        assert " ".join(label.replace(OVERRIDE, "").split()) in said
    assert OVERRIDE not in page
    assert "49" not in re.findall(r"\{\{ 7 \* 7 \}\} \w+", said)
    drawn = "".join(re.findall(r"<svg.*?</svg>", page, flags=re.DOTALL))
    assert "alert" in drawn and "<script" not in drawn


def test_hostile_labels_in_the_methods_file(hostile_study):
    text = methods_text(hostile_study)
    assert r"\<script>" in text and "\n<script" not in text
    assert r"\](" in text or "[x](" not in text
    assert "{{ 7" in text


@pytest.mark.parametrize(
    ("label", "written"),
    [
        ("<b>", r"\<b>"), ("p <= .05", "p <= .05"), ("d_z", "d_z"), ("_x_", r"\_x\_"), ("# top", r"\# top"),
        ("1. one", r"\1. one"), ("a*b", r"a\*b"), ("[x](y)", r"[x\](y)"), ("[0.1, 0.2]", "[0.1, 0.2]"),
        ("two\nlines", "two lines"),
    ],
)  # fmt: skip
def test_markdown(label, written):
    assert markdown_text(label) == written


def test_nothing_is_fetched(page):
    parsed = Page(page)
    for tag, attributes in parsed.elements:
        for name in ("src", "href", "xlink:href", "srcset", "data", "action", "poster"):
            value = attributes.get(name)
            assert value is None or value.startswith(("#", "data:")), (tag, value)
    assert not re.search(r"https?://", page.replace("http-equiv", ""))
    assert not re.search(r"@import|url\((?!#)", page)
    policy = next(attributes["content"] for attributes in parsed.all("meta") if "http-equiv" in attributes)
    assert policy.startswith("default-src 'none'")
    assert not parsed.all("script")


def test_pictures_have_words_and_wide_parts_can_be_reached(page):
    parsed = Page(page)
    pictures = parsed.all("svg")
    assert len(pictures) >= 8
    assert all(attributes["role"] == "img" and len(attributes["aria-label"]) > 20 for attributes in pictures)
    assert len(parsed.all("figcaption")) == len(parsed.all("figure")) == len(pictures)
    scrolling = [attributes for attributes in parsed.all("div") if attributes.get("role") == "region"]
    assert scrolling and all(attributes["tabindex"] == "0" and attributes["aria-label"] for attributes in scrolling)
    assert all("scope" in attributes for attributes in parsed.all("th"))


def test_the_first_screen_holds_the_finding(study, page):
    result = next(iter(study.contrasts.values()))
    leading = result.clusters.iloc[0]
    first = "".join(Page(page.split('<section class="contrast"')[0]).texts)
    assert result.sentence() in first
    assert "corrected p, cluster 1" in first
    assert f"+{leading.estimate:.2f}, 95 % CI [{leading.estimate_low:.2f}, {leading.estimate_high:.2f}]" in first
    assert all(caution in first for caution in result.cautions)


def test_what_every_report_says(make_study):
    page = " ".join("".join(Page(report_html(make_study(names=("a", "b")))).texts).split())
    for said in (
        "This output serves research. Power changes are not a diagnosis; clinical decisions belong to licensed practice.",
        "The p-values of the 2 contrasts are not corrected for each other",
        "Thresholds, windows and contrasts that were chosen after seeing the data void the p-values.",
        "5f" * 32,
        "seed",
        "where an effect begins or ends in time or frequency was not tested",
    ):
        assert said in page


def test_without_a_plan_the_report_says_so(make_study):
    page = report_html(make_study(plan_text=None, provenance={}))
    assert "What was set is in no plan file: it was set in calls from Python." in page


def test_methods_and_report_say_the_same(study, page):
    text, said = methods_text(study), "".join(Page(page).texts)
    result = next(iter(study.contrasts.values()))
    for words in (result.methods(), result.sentence(), *result.cautions):
        assert words in said
        assert markdown_text(words) in text


FORBIDDEN = re.compile(
    r"\bno effects?\b|\bprov(?:es|ed|en that)\b|\blasted from\b|\bstart(?:s|ed) at\b|\bonset\b|\bno difference\b",
    re.IGNORECASE,
)


@pytest.mark.parametrize("effect", [0.0, 2.5])
@pytest.mark.parametrize("correction", [tfs.ClusterMass(0.05), tfs.MaxStatistic(), tfs.FalseDiscoveryRate()])
def test_wording(effect, correction, make_study, make_maps, make_result):
    maps = make_maps(effect=effect)
    study = make_study(maps=maps, contrasts={"memory": make_result(correction, maps=maps)})
    page = report_html(study)
    said = " ".join("".join(Page(page).texts).split())
    assert not FORBIDDEN.findall(said)
    assert not FORBIDDEN.findall(methods_text(study))
    # Each map of uncorrected values carries the word.
    for kind in ("difference", "statistic", "effect_size", "channels"):
        for figure in re.findall(rf'<figure class="\w+ {kind}">.*?</figure>', page, flags=re.DOTALL):
            assert "uncorrected" in figure


def luminance(colour):
    parts = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return float(np.dot([0.2126, 0.7152, 0.0722], linear))


def contrast(first, second):
    bright, dark = sorted((luminance(first), luminance(second)), reverse=True)
    return (bright + 0.05) / (dark + 0.05)


def test_text_contrast_in_light_and_dark(page):
    """WCAG 2.2, 1.4.3: 4.5 to 1 for text; 1.4.11: 3 to 1 for marks."""
    schemes = re.findall(r":root \{(.*?)\}", page, flags=re.DOTALL)[:2]
    for scheme in schemes:
        colours = dict(re.findall(r"--([\w-]+): (#[0-9a-f]{6})", scheme))
        for text in ("ink", "muted", "accent"):
            for ground in ("paper", "sheet", "accent-soft"):
                assert contrast(colours[text], colours[ground]) >= 4.5, (text, ground)
        assert contrast(colours["ink"], colours["open-soft"]) >= 4.5
        assert contrast(colours["ink"], colours["mind-soft"]) >= 4.5
        assert contrast(colours["mind"], colours["mind-soft"]) >= 3
    assert len(schemes) == 2


def test_figures_follow_the_scheme_of_the_page(page):
    drawn = "".join(re.findall(r"<svg.*?</svg>", page, flags=re.DOTALL))
    assert "var(--ink)" in drawn and "#1b2733" not in drawn


@pytest.mark.parametrize(
    "kind", ["one channel", "one frequency", "one time", "many channels", "gaps", "no effect of size"]
)
def test_planes_of_every_shape(kind, make_maps, make_result):
    from tfstats.reporting import StudyResults

    shapes = {
        "one channel": {"channels": ("Fz",)},
        "one frequency": {"frequencies": (6.0,)},
        "one time": {"times": (0.3,)},
        "many channels": {"channels": tuple(f"E{number}" for number in range(20))},
        "gaps": {"gap": True},
        "no effect of size": {"effect": 0.0},
    }
    result = make_result(maps=make_maps(**shapes[kind]))
    page = Page(report_html(StudyResults({"a": result}, baseline_window=(-0.5, -0.2))))
    assert not page.faults and len(page.all("svg")) >= 5


def test_two_kinds_of_trials(make_maps):
    """Trials of one subject: no unit has a difference of its own, so the right panel holds the interval alone."""
    from tfstats.contrasts.contrast import Contrast, Relabelling
    from tfstats.reporting import StudyResults

    rng = np.random.default_rng(0)
    values = rng.normal(size=(30, 1, 3, 5))
    labels = np.repeat([1, 0], 15).astype(np.uint8)
    values[labels == 1, :, 1, 1:4] += 2.5
    contrast_ = Contrast(
        design="trialwise", values=values, unit_names=tuple(str(row) for row in range(30)), unit_kind="trial",
        channels=("Fz",), frequencies=np.array([4.0, 6.0, 8.0]), times=np.arange(5) / 10, unit="decibel",
        statistic="welch_score", relabelling=Relabelling("shuffle"), null_hypothesis="Same distribution.",
        alternatives={"two-sided": "Means differ."}, difference="recalled - missed", labels=labels,
        label_names=("recalled", "missed"),
        condition_means={"recalled": values[labels == 1].mean(axis=0), "missed": values[labels == 0].mean(axis=0)},
    )  # fmt: skip
    result = tfs.permutation_test(contrast_, tfs.ClusterMass(0.05), permutations=500, threads=1)
    assert len(result.significant)
    page = Page(report_html(StudyResults({"trials": result})))
    assert not page.faults
    assert "individual trials" in "".join(page.texts)


def test_what_acts_without_being_seen_is_left_out():
    from tfstats.reporting.plain_text import printable

    assert printable("a\u202eb\x00c\ud800d\n\t\u200dé") == "abcd\n\t\u200dé"
