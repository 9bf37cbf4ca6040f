import re
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from made_report import NAMES, bare_graph, changed, made_content, made_graph, one_tube
from small_graphs import random_tree

from ramulus.line import Results
from ramulus.report.figures import figures
from ramulus.report.page import CAUTION, report_html, write_report
from ramulus.trust.flags import raise_flags

VOID = {"meta", "img", "br", "input", "link", "hr"}


class Page(HTMLParser):
    """What a page holds, with a check that its elements nest."""

    def __init__(self, text):
        super().__init__()
        self.ids, self.links, self.images, self.open, self.words = [], [], [], [], []
        self.external = []
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        values = dict(attrs)
        if "id" in values:
            self.ids.append(values["id"])
        if tag == "a":
            self.links.append(values["href"])
        if tag == "img":
            self.images.append(values)
        if tag in ("link", "iframe", "object", "embed") or (tag == "script" and "src" in values):
            self.external.append(tag)
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] not in ("script", "style"):
            self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())


def page_of(content):
    return report_html(content, *figures(content))


@pytest.fixture(scope="module")
def content():
    return made_content()


@pytest.fixture(scope="module")
def html(content):
    return page_of(content)


@pytest.fixture(scope="module")
def page(html):
    return Page(html)


def test_the_caution_of_research_software_is_in_every_report(page):
    # The words that the design asks for.
    for words in (
        "Research software", "not a medical device", "not for diagnosis or treatment decisions",
        "local rules for human and animal data",
        "clinical questions answered by licensed professionals",
    ):  # fmt: skip
        assert words in CAUTION
    assert CAUTION in page.text
    assert CAUTION in Page(page_of(bare_graph(made_content(), one_tube()))).text


def test_the_verdict_and_the_flags_come_first(page):
    text = page.text
    assert text.index("Reject, unless") < text.index("Image and graph")
    assert text.index("the voxels are 6 times longer") < text.index("Image and graph")
    assert text.index("at most 5.5 times") < text.index("Image and graph")


def test_the_page_needs_no_network(html, page):
    assert page.external == []
    assert all(image["src"].startswith("data:image/png;base64,") for image in page.images)
    shown = re.sub(
        r'<script type="application/octet-stream".*?</script>', "", html, flags=re.DOTALL
    )
    assert "http://" not in shown
    assert "https://" not in shown
    assert "default-src 'none'" in html


def test_every_link_has_its_target_and_every_picture_its_words(page):
    assert len(page.ids) == len(set(page.ids))
    assert {link.removeprefix("#") for link in page.links} <= set(page.ids)
    assert all(len(image["alt"]) > 10 for image in page.images)
    assert len(page.images) == 16


def test_every_flags_section_exists(page):
    from ramulus.trust.flags import FLAG_RULES

    assert {rule.section for rule in FLAG_RULES} <= set(page.ids)


def test_names_cannot_become_markup(content):
    evil = '<script>alert("x")</script>&\'"'
    segments = content.tables["segments"].assign(review=evil)
    resistance = content.tables["resistance"].assign(outlet_rule=evil)
    summary = {
        **content.summary, "sample": evil, "outlet_rule": evil, "order_note": evil,
        "length_ratio": {"value": None, "reason": evil}, "junctions_not_used": {evil: 1},
        "spacing_origin": [evil],
    }  # fmt: skip
    html = page_of(
        changed(
            content, title=evil, summary=summary, settings=evil, provenance={evil: evil},
            tables={**content.tables, "segments": segments, "resistance": resistance},
            edits=[{"op": evil, "reason": evil}], twin={"reason": evil},
        )
    )  # fmt: skip
    assert "<script>alert" not in html
    assert Page(html).text.count("<script>alert(") >= 8


def test_the_same_content_gives_the_same_page(html):
    assert page_of(made_content()) == html


def test_the_page_stays_below_its_size(html):
    assert len(html) < 6e6


def test_settings_and_provenance_can_be_read(page):
    assert "recentre = true" in page.text
    assert "0123abcd" in page.text


@pytest.mark.parametrize("name", NAMES)
def test_a_missing_table_is_no_failure(content, name):
    drawn, left_out = {}, {"radii.png": "not drawn in this test", "image_graph.png": "as before"}
    tables = {k: t for k, t in content.tables.items() if k != name}
    html = report_html(changed(content, tables=tables), drawn, left_out)
    assert "as not drawn in this test" in Page(html).text


def test_a_lone_vessel_makes_a_page_with_reasons():
    text = Page(page_of(bare_graph(made_content(), one_tube()))).text
    assert "fewer than two orders have a value" in text
    assert "the input was a graph" in text
    assert "a twin is made for a stack of grey values alone" in text
    assert "No flag was raised" in text
    assert "no path joins the inlet to an outlet" in text


def test_a_mesh_without_orders_makes_a_page(content):
    orders = content.tables["orders"].iloc[:0]
    segments = content.tables["segments"].assign(order=pd.array([pd.NA] * 40, dtype="Int64"))
    facts = {"loop_share": 0.7}
    mesh = changed(
        content, tables={**content.tables, "orders": orders, "segments": segments},
        flags=raise_flags(facts), summary={**content.summary, "orders": 0, "image": facts},
    )  # fmt: skip
    text = Page(page_of(mesh)).text
    assert "70 % of the length lies on loops" in text
    assert "no parent has an order" in text


def test_an_empty_graph_makes_a_page(content):
    graph = made_graph()
    none = graph.select_segments(np.zeros(graph.n_segments, dtype=bool))
    text = Page(page_of(bare_graph(content, none))).text
    assert "the graph has no segment" in text


def test_the_samples_folder_gets_the_page_and_its_figures(content):
    results = Results(
        content.graph, None, content.projections, content.tables, content.summary, {},
        list(content.edits), {}, content.profiles,
    )  # fmt: skip
    files = write_report(
        results, summary=content.summary, flags=content.flags, twin=content.twin, title="",
        settings=content.settings, provenance=content.provenance,
    )  # fmt: skip
    assert all(name == "report.html" or name.startswith("figures/") for name in files)
    assert len(files) == 17
    assert "<h1>sample 7</h1>" in files["report.html"].decode()


@pytest.mark.slow
def test_a_hundred_thousand_segments_stay_below_the_size_and_are_said_to_be_thinned():
    rng = np.random.default_rng(2)
    graph = random_tree(100_000, seed=2).replace(spacing_um=(1.0, 1.0, 1.0))
    names = [
        "voxels_across", "tortuosity", "order", "strahler", "generation", "radius_um_low",
        "flow_um3_per_s", "velocity_um_per_s", "wall_shear_stress_pa", "resistance_share",
        "radius_um_high",
    ]  # fmt: skip
    segments = graph.to_frames()["segments"].assign(**{n: rng.random(100_000) for n in names})
    # Noise is what packs worst.
    projections = {name: rng.random((900, 900)) for name in "zyx"}
    content = bare_graph(made_content(), graph)
    html = page_of(changed(content, tables={"segments": segments}, projections=projections))
    assert len(html) < 6e6
    assert "Drawn are 12,000 of 100,000 segments" in html
