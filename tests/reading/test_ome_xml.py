from __future__ import annotations

import xml.etree.ElementTree as ElementTree

import pytest

from fringespan.reading.ome_xml import looks_like_ome, ome_pixel_size

SCHEMA = "http://www.openmicroscopy.org/Schemas/OME/2016-06"


def ome(*pixels: str) -> str:
    images = "".join(f'<Image ID="Image:{i}"><Pixels ID="Pixels:{i}" {p}</Image>' for i, p in enumerate(pixels))
    return f'<?xml version="1.0" encoding="UTF-8"?><OME xmlns="{SCHEMA}">{images}</OME>'


def test_units_and_axes() -> None:
    text = ome('PhysicalSizeX="0.021" PhysicalSizeXUnit="nm" PhysicalSizeY="0.02" PhysicalSizeYUnit="nm"/>')
    assert looks_like_ome(text)
    stated = ome_pixel_size(text, 0)
    assert stated is not None
    assert (stated.row, stated.column, stated.unit, stated.source) == (0.02, 0.021, "nm", "OME-XML")


def test_each_axis_may_have_its_own_unit() -> None:
    stated = ome_pixel_size(
        ome('PhysicalSizeX="21" PhysicalSizeXUnit="pm" PhysicalSizeY="0.2" PhysicalSizeYUnit="Å"/>'), 0
    )
    assert stated is not None
    assert (stated.row, stated.column) == pytest.approx((0.02, 0.021))
    assert stated.unit == "nm"


def test_without_unit_it_is_the_micrometre_of_the_standard() -> None:
    stated = ome_pixel_size(ome('PhysicalSizeX="0.00002" PhysicalSizeY="0.00002"/>'), 0)
    assert stated is not None
    assert stated.unit == "µm"
    assert "standard unit" in stated.source


def test_but_1_without_unit_is_nobodys_pixel_size() -> None:
    stated = ome_pixel_size(ome('PhysicalSizeX="1.0" PhysicalSizeY="1"/>'), 0)
    assert stated is not None
    assert stated.unit is None


@pytest.mark.parametrize(
    "pixels", ['PhysicalSizeX="0.02" PhysicalSizeXUnit="nm"/>', 'PhysicalSizeX="0.02" PhysicalSizeY="wide"/>']
)
def test_half_a_pixel_size_is_not_completed(pixels: str) -> None:
    stated = ome_pixel_size(ome(pixels), 0)
    assert stated is not None
    assert stated.row != stated.row  # not a number: nothing is guessed


def test_nothing_stated() -> None:
    assert ome_pixel_size(ome('SizeX="5"/>'), 0) is None
    assert ome_pixel_size(f'<OME xmlns="{SCHEMA}"><BinaryOnly UUID="x"/></OME>', 0) is None


def test_each_page_has_the_size_of_its_image() -> None:
    def size(nm: float, planes: str) -> str:
        return f'{planes} PhysicalSizeX="{nm}" PhysicalSizeXUnit="nm" PhysicalSizeY="{nm}" PhysicalSizeYUnit="nm"'

    text = ome(
        size(0.02, 'SizeZ="2" SizeT="1" SizeC="1"') + "/>",
        size(0.03, 'SizeZ="1" SizeT="1" SizeC="3"') + '><Channel SamplesPerPixel="3"/></Pixels>',
        size(0.04, 'SizeZ="1" SizeT="1" SizeC="1"') + "/>",
    )
    found = [ome_pixel_size(text, page) for page in range(5)]
    assert [None if s is None else s.row for s in found] == [0.02, 0.02, 0.03, 0.04, None]


def test_an_older_schema_and_a_prefix_are_read_alike() -> None:
    text = (
        '\ufeff<ome:OME xmlns:ome="http://www.openmicroscopy.org/Schemas/OME/2013-06"><ome:Image><ome:Pixels '
        'PhysicalSizeX="2" PhysicalSizeY="2"/></ome:Image></ome:OME>'
    )
    assert looks_like_ome(text)
    stated = ome_pixel_size(text, 0)
    assert stated is not None
    assert stated.row == 2


@pytest.mark.parametrize(
    "text",
    [
        ome('PhysicalSizeX="0.02"/>')[:-20],
        "<OME>&undefined;</OME>",
        '<!DOCTYPE OME [<!ENTITY a "aaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;">]><OME>&b;</OME>',
        "",
    ],
    ids=["cut off", "unknown entity", "entities that multiply", "empty"],
)
def test_damaged_or_hostile_text_is_not_parsed(text: str) -> None:
    with pytest.raises(ElementTree.ParseError):
        ome_pixel_size(text, 0)


@pytest.mark.parametrize("text", ["", "unit=nm", "<html></html>", '{"unit": "nm"}'])
def test_other_descriptions_are_not_ome(text: str) -> None:
    assert not looks_like_ome(text)
