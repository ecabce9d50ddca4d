"""Values as users, scripts and models hand them over: numbers, blanks, text, properties."""

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge.keys import Key, Values
from downwarp_checkout.plugin.core.errors import DownwarpError
from qgis.core import NULL, QgsProcessingContext, QgsProcessingParameterDefinition, QgsProperty

KEYS = (
    Key("WIDTH", "number", "Width, km", 5.0),
    Key("DEPTH", "number", "Depth, m"),
    Key("COUNT", "whole", "Count", 3),
    Key("SIDE", "enum", "Side", 1, ("Left", "Right", "Both")),
    Key("HELD", "enum", "Held", None, ("Free", "Fixed")),
    Key("ROUGH", "flag", "Rough", False),
    Key("DEM", "raster", "Relief", required=True),
)


def values(**given):
    return Values(KEYS, given, QgsProcessingContext())


@pytest.mark.parametrize("blank", [None, NULL, "", "   "])
def test_blanks_are_defaults(blank):
    """Whatever stands for nothing; None where a key has no default."""
    read = values(WIDTH=blank, DEPTH=blank, COUNT=blank, SIDE=blank, HELD=blank, ROUGH=blank)
    assert read.number("WIDTH") == 5.0
    assert read.number("DEPTH") is read.scaled("DEPTH", 1e3) is read.enum("HELD") is None
    assert read.whole("COUNT") == 3
    assert read.enum("SIDE") == 1
    assert read.flag("ROUGH") is False
    assert not read.given("DEPTH")


@pytest.mark.parametrize("value", [7, 7.0, "7", " 7 ", "7.0", "0.7e1", np.float64(7), QgsProperty.fromValue(7)])
def test_numbers_in_any_dress(value):
    """As text on the command line, as numpy scalars in scripts, as properties in models."""
    read = values(WIDTH=value, COUNT=value)
    assert read.number("WIDTH") == 7.0
    assert read.scaled("WIDTH", 1e3) == 7000.0
    assert read.whole("COUNT") == 7


def test_an_expression_is_evaluated():
    """A data-defined value."""
    assert values(WIDTH=QgsProperty.fromExpression("2 * 3")).number("WIDTH") == 6.0


@pytest.mark.parametrize(
    ("key", "value", "words"),
    [
        ("WIDTH", "wide", "WIDTH is 'wide'; it takes a number."),
        ("WIDTH", "nan", "WIDTH is nan; it takes a number."),
        ("WIDTH", float("-inf"), "WIDTH is -inf; it takes a number."),
        ("WIDTH", True, "WIDTH is True; it takes a number."),
        ("COUNT", 2.5, "COUNT is 2.5; it takes a whole number."),
        ("SIDE", 3, "SIDE is 3; it takes one of: 0 Left, 1 Right, 2 Both."),
        ("SIDE", -1, "SIDE is -1; it takes one of: 0 Left, 1 Right, 2 Both."),
        ("SIDE", "1.5", "SIDE is '1.5'; it takes one of"),
        ("SIDE", "inf", "SIDE is 'inf'; it takes one of"),
        ("SIDE", "Left", "SIDE is 'Left'; it takes one of"),
        ("SIDE", [0, 1], "SIDE is [0, 1]; it takes one of"),
        ("ROUGH", "rather", "ROUGH is 'rather'; it takes true or false."),
        ("WITDH", 5, "WITDH is not a key of this algorithm; did you mean WIDTH?"),
        ("ZZZ", 5, "ZZZ is not a key of this algorithm."),
    ],
)
def test_everything_else_is_refused_by_name(key, value, words):
    """The key, what it got, what it takes."""
    with pytest.raises(DownwarpError) as caught:
        values(**{key: value}).check(each.name for each in KEYS)
    assert words in str(caught.value)


@pytest.mark.parametrize(("text", "flag"), [("true", True), ("True", True), ("1", True), ("yes", True), (1, True),
                                            (True, True), ("false", False), ("0", False), (0, False)])  # fmt: skip
def test_flags(text, flag):
    """The ways to say yes and no."""
    assert values(ROUGH=text).flag("ROUGH") is flag


def test_a_required_number_must_be_there():
    """The message says that it is blank."""
    with pytest.raises(DownwarpError, match="DEPTH is blank; it takes a number"):
        values().required_number("DEPTH")


def test_definitions_are_optional_unless_required():
    """So that a key may be left blank; advanced keys fold away."""
    flags = QgsProcessingParameterDefinition.Flag
    for key in KEYS:
        assert bool(key.definition().flags() & flags.FlagOptional) == (not key.required)
    folded = Key("X", "number", "X", advanced=True).definition()
    assert folded.flags() & flags.FlagAdvanced
    assert folded.flags() & flags.FlagOptional
