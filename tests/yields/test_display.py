"""What notebooks show, read by an XML parser."""

import xml.etree.ElementTree as ET

import pandas as pd
import pytest

from steelyard.integrate.popfile import default_population
from steelyard.yields import load, shipped
from steelyard.yields.display import html_table


def read(text):
    """The one table, which is XML too, for a frame indexed by its rows' headings."""
    rows = [["".join(cell.itertext()) for cell in row] for row in ET.fromstring(f"<a>{text}</a>").iter("tr")]
    return pd.DataFrame(
        [row[1:] for row in rows[1:]], index=[row[0] for row in rows[1:]], columns=rows[0][1:]
    )


@pytest.mark.parametrize("id", shipped())
def test_yield_sets(id):
    one = load(id)
    text = one._repr_html_()
    assert f">{id}: {one.kind}, {len(one.species)} species" in text
    rows = text.count('scope="row"')
    assert rows == len(one.slices)


def test_a_grid_of_a_set():
    # Kobayashi et al. (2006): Z = 0, 0.001, 0.004, 0.02, each with 13 to 40 Msun
    frame = read(load("kobayashi-2006")._repr_html_())
    assert frame.index.tolist() == ["0", "0.001", "0.004", "0.02"]
    assert (frame["from (Msun)"] == "13").all() and (frame["to (Msun)"] == "40").all()


def test_a_result():
    result = default_population().weigh(["1 Gyr", "10 Gyr", "100 Myr"])
    text = result._repr_html_()
    assert "total yields up to 1e+10 yr" in text and "-: not followed; †: without" in text
    frame = read(text)
    assert frame.columns.tolist() == ["agb", "core-collapse", "thermonuclear", "sum"]
    for name in frame.index:
        assert float(frame.loc[name, "sum"].rstrip("†")) == pytest.approx(result.get(name)[1], rel=6e-4)
    # Karakas (2010) and Doherty et al. (2014) follow no manganese
    assert frame.loc["Mn", "agb"] == "-"


def test_names_are_text():
    assert "<script>" not in html_table("<script>", ["<script>"], [["<script>", "<script>"]], "<script>")
