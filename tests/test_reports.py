"""The page for a review: complete, self-contained, escaped, the same for the same input, whole or not at all."""

from html.parser import HTMLParser

import numpy as np
import pytest

import limen as lm

pytest.importorskip("matplotlib").use("Agg")

VOID = {"meta", "br", "hr", "img", "input", "link"}


class Page(HTMLParser):
    """Text and tags of a page; fails where tags do not nest."""

    def __init__(self, source):
        super().__init__()
        self.open, self.tags, self.links, self.text = [], set(), [], ""
        self.feed(source)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        self.tags.add(tag)
        self.links += [value for name, value in attributes if name in {"src", "href", "xlink:href", "action"}]
        assert not [name for name, _ in attributes if name.startswith("on")]
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.handle_starttag(tag, attributes)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text += data


@pytest.fixture
def states():
    return lm.States({"empty": lm.gaussian(0.8, 0.05), "<cap>": lm.gaussian(1.3, 0.07)}, priors=[0.02, 0.98])


@pytest.fixture
def page(tmp_path):
    def write(*args, **kwargs):
        lm.report(tmp_path / "review.html", *args, **kwargs)
        return (tmp_path / "review.html").read_text(encoding="utf-8")

    return write


def test_page_shows_levels_rates_and_counts(page, states):
    rule = lm.bayes(states)
    counts = np.array([[4711, 13], [17, 90210]])
    text = Page(page(rule, states, tally=counts)).text
    assessment = rule.assess(states)
    low, high = lm.error_bounds(30, counts.sum())
    for shown in (*(repr(float(level)) for level in rule.levels), f"{assessment.error_rate:.6g}", "4711", "90210",
                  f"{low:.6g}", f"{high:.6g}", rule.search, "<cap>"):
        assert shown in text


def test_page_loads_and_runs_nothing(page, states):
    parsed = Page(page(lm.bayes(states), states))
    assert "svg" in parsed.tags
    assert parsed.tags & {"script", "link", "img", "iframe", "object"} == set()
    assert [link for link in parsed.links if not link.startswith("#")] == []


def test_names_and_title_are_escaped(page, states):
    source = page(lm.bayes(states), states, title="<b>&")
    assert "<cap>" not in source and "<b>" not in source and "&lt;b&gt;&amp;" in source


def test_page_is_the_same_for_the_same_input(page, states):
    rule = lm.bayes(states)
    assert page(rule, states) == page(rule, states)


def test_rates_below_the_smallest_double_are_shown_by_their_logarithm(page):
    far = lm.States({"low": lm.gaussian(0.0, 1.0), "high": lm.gaussian(100.0, 1.0)}, priors=[0.5, 0.5])
    rule = lm.bayes(far)
    log10 = rule.assess(far).log10_error_rate
    assert log10 < -500
    assert f"10^{log10:.4f}" in Page(page(rule, far)).text


def test_a_failure_leaves_the_old_page(page, states, tmp_path):
    old = page(lm.bayes(states), states)
    with pytest.raises(ValueError, match=r"tally has counts of shape \(3,\); expected"):
        page(lm.bayes(states), states, tally=[1, 2, 3])
    assert (tmp_path / "review.html").read_text(encoding="utf-8") == old
    assert [path.name for path in tmp_path.iterdir()] == ["review.html"]
