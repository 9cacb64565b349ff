"""The sample pictures are found wherever the package was installed to."""

import pytest

from fringespan import sample_pictures
from fringespan.exceptions import UnreadablePictureError
from fringespan.sample_pictures import sample_file


@pytest.mark.parametrize("name", ["two_grains.ome.tif", "two_grains.json"])
def test_the_picture_of_the_demo_and_its_truth_are_there(name):
    assert sample_file(name).is_file()


def test_those_inside_an_installed_package_come_first(tmp_path, monkeypatch):
    inside, beside = tmp_path / "inside", tmp_path / "beside"
    for folder in (inside, beside):
        folder.mkdir()
        (folder / "picture.tif").touch()
    monkeypatch.setattr(sample_pictures, "_FOLDERS", (inside, beside))
    assert sample_file("picture.tif") == inside / "picture.tif"


def test_one_that_is_not_there_is_named():
    with pytest.raises(UnreadablePictureError, match="install fringespan again"):
        sample_file("nothing.tif")
