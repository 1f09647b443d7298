"""The C module as such: its version and its list of statuses."""

import limen
from limen import _core


def test_version_is_the_header_s():
    assert limen.__version__ == _core.__version__


def test_every_status_has_a_sentence_and_an_exception():
    for name, sentence, exception in _core._statuses():
        assert sentence
        assert (exception is None) == (name == "OK")
