import pytest

from steelyard.yields.errors import InputError, nearest


def test_one_line_that_says_where_what_and_how_to_mend():
    error = InputError("mass is\n negative", where="a.csv row 3", mend="give\tmasses")
    assert str(error) == "a.csv row 3: mass is negative; give masses"
    assert (error.what, error.where, error.mend) == ("mass is\n negative", "a.csv row 3", "give\tmasses")
    assert isinstance(error, ValueError)
    assert str(InputError("x")) == "x"


@pytest.mark.parametrize(
    "name, known, says",
    [
        ("KARAKAS-2010", ["karakas-2010", "x"], "did you mean karakas-2010?"),
        ("karakas2010", ["karakas-2010", "doherty-2014"], "did you mean karakas-2010?"),
        ("", ["a", "b"], "known: a, b"),
        ("zzz", [str(i) for i in range(20)], "and 8 more"),
        ("zzz", [], "known: "),
    ],
)
def test_nearest(name, known, says):
    assert says in nearest(name, known)


def test_nearest_takes_any_iterable_once():
    assert nearest("agess", (k for k in ("ages", "imf"))) == "did you mean ages?"
