import numpy as np
import pytest
import tifffile

from napari_boutonrelease.boutons import distance_along, read_axon, read_positions
from napari_boutonrelease.errors import BoutonFileError


def write(path, text):
    path.write_text(text, encoding="utf-8")
    return path


def positions(path, *, pixel_size_um=0.2):
    return read_positions(path, pixel_size_um=pixel_size_um, image_shape=(50, 100))


def test_reads_pixels_and_ids(tmp_path):
    given = positions(write(tmp_path / "a.csv", "bouton,y_px,x_px,note\n7,1.5,2\n3,49,99.4,far\n"))
    np.testing.assert_array_equal(given.bouton, [7, 3])
    np.testing.assert_allclose(given.y_px, [1.5, 49])
    np.testing.assert_allclose(given.x_px, [2, 99.4])
    assert given.label is None


def test_reads_micrometres_a_byte_order_mark_and_semicolons(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("y_um; x_um\n1.0; 2.0\n\n", encoding="utf-8-sig")
    given = positions(path)
    np.testing.assert_allclose([given.y_px[0], given.x_px[0]], [5, 10])
    np.testing.assert_array_equal(given.bouton, [1])


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "is empty"),
        ("y_px,x_px\n", "holds no bouton"),
        ("y,x\n1,2\n", "the header has y, x"),
        ("y_px,x_px\n1,2\n3,oops\n", "row 3, column x_px: a number is needed .given 'oops'"),
        ("y_px,x_px\n1,nan\n", "row 2, column x_px"),
        ("y_px,x_px\n1\n", "row 2, column x_px"),
        ("y_px,x_px\n1,5,2,5\n", "row 2: more cells"),
        ("y_px,x_px\n1,2\n60,2\n", "row 3: the bouton at y = 60, x = 2 px lies outside the image of 50 x 100"),
        ("y_px,x_px,y_px\n1,2,3\n", "stands twice"),
        ("bouton,y_px,x_px\n1,1,2\n1,3,4\n", "row 3, column bouton: id 1 stands in row 2"),
        ("bouton,y_px,x_px\n0,1,2\n", "whole numbers from 1"),
        ("bouton,y_px,x_px\na,1,2\n", "whole numbers from 1"),
    ],
)
def test_a_wrong_table_says_where_and_what(tmp_path, text, message):
    with pytest.raises(BoutonFileError, match=message):
        positions(write(tmp_path / "places.csv", text))


def test_micrometres_need_a_pixel_size(tmp_path):
    with pytest.raises(BoutonFileError, match="pixel size is not known"):
        positions(write(tmp_path / "a.csv", "y_um,x_um\n1,2\n"), pixel_size_um=None)


def test_missing_and_foreign_files(tmp_path):
    with pytest.raises(BoutonFileError, match="no such file"):
        positions(tmp_path / "none.csv")
    with pytest.raises(BoutonFileError, match=r"ends in \.csv"):
        positions(write(tmp_path / "a.xlsx", "?"))
    with pytest.raises(BoutonFileError, match="not a TIFF image"):
        positions(write(tmp_path / "a.tif", "no image"))
    (tmp_path / "b.csv").write_bytes(b"y_px,x_px\n\xff\xfe,1\n")
    with pytest.raises(BoutonFileError, match="UTF-8"):
        positions(tmp_path / "b.csv")


def test_reads_a_label_image(tmp_path):
    label = np.zeros((50, 100), dtype=np.uint16)
    label[10:13, 20:23] = 5
    label[40, 80] = 2
    tifffile.imwrite(tmp_path / "labels.tif", label)
    given = positions(tmp_path / "labels.tif")
    np.testing.assert_array_equal(given.bouton, [2, 5])
    np.testing.assert_allclose(given.y_px, [40, 11])
    np.testing.assert_allclose(given.x_px, [80, 21])
    np.testing.assert_array_equal(given.label, label)


@pytest.mark.parametrize(
    ("label", "message"),
    [
        (np.ones((50, 90), np.uint8), "the label image is 50 x 90 pixels, but the movie is 50 x 100"),
        (np.zeros((50, 100), np.uint8), "no bouton"),
        (np.full((50, 100), -1, np.int16), "no negative numbers"),
        (np.full((50, 100), 0.5, np.float32), "whole numbers"),
    ],
)
def test_a_wrong_label_image_says_what_is_wrong(tmp_path, label, message):
    tifffile.imwrite(tmp_path / "labels.tif", label)
    with pytest.raises(BoutonFileError, match=message):
        positions(tmp_path / "labels.tif")


def test_reads_an_axon(tmp_path):
    path = write(tmp_path / "axon.csv", "x_um,y_um\n0,0\n2,0\n2,1\n")
    np.testing.assert_allclose(read_axon(path, pixel_size_um=0.2), [[0, 0], [0, 10], [5, 10]])
    with pytest.raises(BoutonFileError, match=r"two different vertices \(given 1\)"):
        read_axon(write(tmp_path / "one.csv", "x_px,y_px\n3,3\n3,3\n"), pixel_size_um=None)
    with pytest.raises(BoutonFileError, match="no such file"):
        read_axon(tmp_path / "none.csv", pixel_size_um=None)


def test_distance_along_a_bent_path():
    path = [[0, 0], [0, 10], [0, 10], [5, 10]]
    along, offset = distance_along(path, y_px=[2, -3, 4, 9], x_px=[4, 5, 12, 10])
    np.testing.assert_allclose(along, [4, 5, 14, 15])
    np.testing.assert_allclose(offset, [2, -3, -2, 4])
