"""Texts that keep their template and values: they read as plain English everywhere, and survive pickling."""

import pickle

import pytest
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.wording import Said, listed, say


def test_a_said_text_is_a_plain_string():
    """Equality, hash, search and joining are those of str; numbers are set as the template says."""
    text = say("{name}: {size:.1f} km", name="a {b}", size=2)
    assert text == "a {b}: 2.0 km" and hash(text) == hash("a {b}: 2.0 km") and text.startswith("a {b}")
    assert (text.template, text.values) == ("{name}: {size:.1f} km", {"name": "a {b}", "size": 2})
    assert type(str(text)) is str
    assert dict.fromkeys([text, "a {b}: 2.0 km"]).keys() == {"a {b}: 2.0 km"}


def test_texts_nest_and_are_filled_later():
    """A template said without values stands as it is, and takes them later; said values stay said."""
    size = say("{percent:.0f} % larger")
    filled = say(size, percent=12.4)
    assert filled == "12 % larger" and filled.template == "{percent:.0f} % larger"
    assert say(filled) is filled
    whole = say("the load is {size}", size=filled)
    assert whole == "the load is 12 % larger" and isinstance(whole.values["size"], Said)


def test_lists():
    """Each text of a list is kept by itself; what stands between them may be said, too."""
    both = listed([say("one"), "2"], say(" and "))
    assert both == "one and 2" and listed([]) == "" and listed(["a", "b", "c"]) == "a, b, c"
    assert both.values["text_0"].template == "one" and both.values["between"].template == " and "


@pytest.mark.parametrize("protocol", range(2, pickle.HIGHEST_PROTOCOL + 1))
def test_pickling(protocol):
    """Text and error come out of another process as they went in, with what is nested in them."""
    text = say("{what} is {size:g}.", what=say("the {kind} plate", kind="thin"), size=1e-3)
    for made in (text, DownwarpError(text).message):
        back = pickle.loads(pickle.dumps(made, protocol))
        assert back == text == "the thin plate is 0.001." and back.template == text.template
        assert back.values["what"].template == "the {kind} plate"
    error = pickle.loads(pickle.dumps(DownwarpError("{key} is {value!r}.", key="DEM", value="x"), protocol))
    assert str(error) == "DEM is 'x'." and error.message.values == {"key": "DEM", "value": "x"}


def test_an_error_without_values_takes_any_text():
    """Braces in a text without values are no places."""
    assert str(DownwarpError("a {b} c")) == "a {b} c"
