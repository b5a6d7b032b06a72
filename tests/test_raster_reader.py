"""Class maps come in from files and arrays as they are, or are refused with what to do."""

import pickle
import threading

import numpy as np
import pytest
import rasterio
from affine import Affine

from geofractal.errors import ConfigError, LayerError, SourceError
from geofractal.landcover.strips import NOT_COVERED
from geofractal.reader.raster import RasterOptions, open_raster, strip_rows
from geofractal.reader.raster_source import ClassMap

UTM = "EPSG:32632"
NORTH_UP = (10.0, 0.0, 500_000.0, 0.0, -10.0, 5_000_000.0)
CODES = np.array([[1, 1, 2, 2], [1, 3, 3, 2], [0, 0, 3, 3]], np.uint8)


def write(
    path,
    codes=CODES,
    *,
    transform=NORTH_UP,
    crs=UTM,
    colormap=None,
    aux=None,
    mask=None,
    **profile,
):
    bands = codes if codes.ndim == 3 else codes[None]
    profile = {
        "driver": "GTiff",
        "dtype": codes.dtype.name,
        "crs": crs,
        "transform": Affine(*transform),
    } | profile
    with rasterio.open(
        path, "w", count=len(bands), height=bands.shape[1], width=bands.shape[2], **profile
    ) as out:
        out.write(bands)
        if colormap:
            out.write_colormap(1, colormap)
        if mask is not None:
            out.write_mask(mask)
    if aux:
        path.with_name(path.name + ".aux.xml").write_text(f"<PAMDataset>{aux}</PAMDataset>", "utf-8")
    return path


def read(source, **options):
    """Return class names cell by cell ('' where not covered) and the raster."""
    raster = open_raster(source, RasterOptions(**options))
    codes = np.concatenate([strip.codes for strip in raster.strips()])
    return np.array([*raster.legend.names, ""])[codes], raster


class TestCodes:
    @pytest.mark.parametrize(
        "dtype",
        ["uint8", "int8", "uint16", "int16", "uint32", "int32", "int64", "uint64", "float32", "float64"],
    )
    def test_every_width_and_sign(self, tmp_path, dtype):
        codes = CODES.astype(dtype)
        names, _ = read(write(tmp_path / "a.tif", codes), whole_numbers=True)
        assert np.array_equal(names.astype(int), CODES)

    def test_negative_and_wide_codes(self, tmp_path):
        codes = np.array([[-5, 2_000_000_000], [-2_000_000_000, -5]], np.int32)
        names, raster = read(write(tmp_path / "a.tif", codes))
        assert np.array_equal(names.astype(int), codes)
        assert raster.legend.names == ["-5", "2000000000", "-2000000000"]  # in the order they were met

    def test_one_bit(self, tmp_path):
        codes = (CODES > 1).astype(np.uint8)
        names, _ = read(write(tmp_path / "a.tif", codes, nbits=1))
        assert np.array_equal(names.astype(int), codes)

    def test_more_than_256_classes(self, tmp_path):
        codes = np.arange(3_000, dtype=np.uint16).reshape(50, 60)
        names, raster = read(write(tmp_path / "a.tif", codes))
        assert np.array_equal(names.astype(int), codes)
        assert len(raster.legend.names) == 3_000

    def test_too_many_codes_are_no_class_map(self, tmp_path):
        codes = np.arange(40_000, dtype=np.int32).reshape(200, 200)
        with pytest.raises(LayerError, match="More than 32,767 codes"):
            read(write(tmp_path / "a.tif", codes))

    def test_strip_height_does_not_change_the_order_of_classes(self, tmp_path):
        codes = np.random.default_rng(0).integers(0, 200, (40, 30)).astype(np.uint8)
        path = write(tmp_path / "a.tif", codes)
        orders = [read(path, strip_rows=rows)[1].legend.names for rows in (1, 7, 40)]
        assert orders[0] == orders[1] == orders[2]

    def test_floats_are_refused_unless_asked_for(self, tmp_path):
        path = write(tmp_path / "a.tif", CODES.astype(np.float32))
        with pytest.raises(LayerError, match=r"holds float32 numbers.*set whole-numbers: true"):
            read(path)

    def test_floats_that_are_not_whole_are_refused(self, tmp_path):
        codes = CODES.astype(np.float32)
        codes[2, 1] = 0.5
        with pytest.raises(LayerError, match=r"0\.5 at row 2, column 1 is not a whole number"):
            read(write(tmp_path / "a.tif", codes), whole_numbers=True, strip_rows=1)

    def test_complex_numbers_are_refused(self, tmp_path):
        with pytest.raises(LayerError, match="complex"):
            read(write(tmp_path / "a.tif", CODES.astype(np.complex64)))

    def test_a_band_that_is_not_there(self, tmp_path):
        with pytest.raises(LayerError, match="has 1 bands; there is no band 2"):
            read(write(tmp_path / "a.tif"), band=2)

    def test_the_band_asked_for(self, tmp_path):
        path = write(tmp_path / "a.tif", np.stack([CODES, CODES + 10]))
        assert np.array_equal(read(path, band=2)[0].astype(int), CODES + 10)


class TestNotCovered:
    COVERED = CODES != 0

    @pytest.mark.parametrize("grid", ["source", "warp"])
    def test_nodata_code(self, tmp_path, grid):
        names, _ = read(write(tmp_path / "a.tif", nodata=0), grid=grid)
        assert "0" not in names
        assert "" in names

    def test_a_further_nodata_code(self, tmp_path):
        names, _ = read(write(tmp_path / "a.tif", nodata=0), nodata=(2,))
        assert set(names.ravel()) == {"1", "3", ""}

    def test_mask_band(self, tmp_path):
        with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True):
            path = write(tmp_path / "a.tif", mask=self.COVERED)
        assert np.array_equal(read(path)[0] != "", self.COVERED)

    def test_alpha_band(self, tmp_path):
        bands = np.stack([CODES, 255 * self.COVERED.astype(np.uint8)])
        path = write(tmp_path / "a.tif", bands, alpha="YES")
        names, raster = read(path)
        assert np.array_equal(names != "", self.COVERED)
        assert raster.legend.names == ["1", "2", "3"]  # a code met under the alpha band only is no class

    @pytest.mark.parametrize("kind", ["mask", "alpha"])
    def test_masks_are_warped_too(self, tmp_path, kind):
        covered = np.ones((40, 40), bool)
        covered[:20] = False
        codes = np.full((40, 40), 3, np.uint8)
        if kind == "mask":
            with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True):
                path = write(tmp_path / "a.tif", codes, mask=covered)
        else:
            bands = np.stack([codes, 255 * covered.astype(np.uint8)])
            path = write(tmp_path / "a.tif", bands, alpha="YES")
        names, _ = read(path, grid="warp")
        assert set(names.ravel()) == {"3", ""}
        assert (names == "3").sum() == pytest.approx(covered.sum(), rel=0.06)

    @pytest.mark.parametrize("nodata", [np.nan, np.float32(-3.4028235e38), 0.5])
    def test_numbers_that_are_no_code(self, tmp_path, nodata):
        codes = CODES.astype(np.float32)
        codes[CODES == 0] = nodata
        names, _ = read(write(tmp_path / "a.tif", codes, nodata=float(nodata)), whole_numbers=True)
        assert np.array_equal(names != "", self.COVERED)

    def test_nodata_everywhere(self, tmp_path):
        names, raster = read(write(tmp_path / "a.tif", np.zeros((3, 3), np.uint8), nodata=0))
        assert set(names.ravel()) == {""}
        assert raster.legend.names == []


CATEGORIES = (
    '<PAMRasterBand band="1"><CategoryNames><Category>bare</Category><Category>Röhricht</Category>'
    "<Category>carr</Category><Category>{third}</Category></CategoryNames></PAMRasterBand>"
)
TABLE = """<PAMRasterBand band="1"><GDALRasterAttributeTable tableType="thematic">
<FieldDefn index="0"><Name>Code</Name><Type>0</Type><Usage>5</Usage></FieldDefn>
<FieldDefn index="1"><Name>Cover</Name><Type>2</Type><Usage>2</Usage></FieldDefn>
<Row index="0"><F>1</F><F>reedbed</F></Row><Row index="1"><F>2</F><F>carr woodland</F></Row>
<Row index="2"><F>3</F><F>open water</F></Row></GDALRasterAttributeTable></PAMRasterBand>"""


class TestClassNames:
    def test_category_names_of_a_palette(self, tmp_path):
        path = write(
            tmp_path / "a.tif", colormap={1: (9, 9, 9, 255)}, aux=CATEGORIES.format(third="water"), nodata=0
        )
        assert read(path)[1].legend.names == ["Röhricht", "carr", "water"]

    def test_attribute_table(self, tmp_path):
        names, _ = read(write(tmp_path / "a.tif", aux=TABLE, nodata=0))
        assert set(names.ravel()) == {"reedbed", "carr woodland", "open water", ""}

    def test_one_name_for_two_codes_needs_a_word_from_the_user(self, tmp_path):
        path = write(tmp_path / "a.tif", aux=CATEGORIES.format(third="carr"))
        with pytest.raises(LayerError, match="calls both code 2 and code 3 'carr'"):
            read(path)
        assert set(read(path, classes={"carr": "carr"}, rest="other")[0].ravel()) == {"carr", "other"}

    def test_groups_by_code_and_by_name(self, tmp_path):
        path = write(tmp_path / "a.tif", aux=TABLE, nodata=0)
        names, raster = read(path, classes={"habitat": ["reedbed", 2], "water": "open water"})
        assert raster.legend.names == ["habitat", "water"]
        assert np.array_equal(names == "habitat", (CODES == 1) | (CODES == 2))

    def test_a_code_not_named_is_an_error_that_says_where(self, tmp_path):
        with pytest.raises(LayerError, match=r"Code 3 at row 1, column 1 belongs to no class\. Named are: a"):
            read(write(tmp_path / "a.tif", nodata=0), classes={"a": [1, 2]}, strip_rows=1)

    def test_or_goes_to_the_stated_rest(self, tmp_path):
        names, _ = read(write(tmp_path / "a.tif", nodata=0), classes={"a": 1}, rest="else")
        assert np.array_equal(names == "else", CODES > 1)

    def test_rest_may_be_a_named_class(self, tmp_path):
        _, raster = read(write(tmp_path / "a.tif"), classes={"a": 1, "b": 2}, rest="b")
        assert raster.legend.names == ["a", "b"]

    def test_rest_alone_says_nothing(self, tmp_path):
        with pytest.raises(ConfigError, match="rest needs classes"):
            read(write(tmp_path / "a.tif"), rest="b")

    def test_a_name_given_twice(self, tmp_path):
        with pytest.raises(ConfigError, match="'Reed' is named twice"):
            read(write(tmp_path / "a.tif"), classes=[("reed", 1), ("Reed", 2)])

    def test_a_code_in_two_classes(self, tmp_path):
        with pytest.raises(ConfigError, match="Code 2 stands for class 'a' and for class 'b'"):
            read(write(tmp_path / "a.tif"), classes={"a": [1, 2], "b": 2})

    def test_a_class_of_the_nodata_code(self, tmp_path):
        with pytest.raises(ConfigError, match="Code 0 stands for no data and for class 'a'"):
            read(write(tmp_path / "a.tif", nodata=0), classes={"a": [0, 1]}, rest="b")

    def test_a_name_the_raster_does_not_have(self, tmp_path):
        path = write(tmp_path / "a.tif", aux=TABLE)
        with pytest.raises(ConfigError, match="no class called 'reeds'; it names: reedbed, carr woodland"):
            read(path, classes={"habitat": "reeds"})

    def test_a_code_before_its_name(self, tmp_path):
        with pytest.raises(ConfigError, match=r"Names stand before codes: reeds: \[2\]"):
            read(write(tmp_path / "a.tif"), classes={"2": "reeds"})


class TestReferences:
    def test_no_crs_names_the_key(self, tmp_path):
        with pytest.raises(LayerError, match="states no CRS; give it with the key crs"):
            read(write(tmp_path / "a.tif", crs=None))

    def test_a_stated_crs(self, tmp_path):
        _, raster = read(write(tmp_path / "a.tif", crs=None), crs=UTM)
        assert raster.grid.crs.to_epsg() == 32632

    def test_a_crs_against_the_files_own(self, tmp_path):
        with pytest.raises(ConfigError, match="states the CRS 'WGS 84 / UTM zone 32N' and the key crs"):
            read(write(tmp_path / "a.tif"), crs="EPSG:25833")

    def test_no_crs_at_all(self, tmp_path):
        with pytest.raises(ConfigError, match="crs is 'EPSG:1'"):
            read(write(tmp_path / "a.tif", crs=None), crs="EPSG:1")

    def test_a_raster_that_is_none(self, tmp_path):
        path = tmp_path / "a.tif"
        path.write_text("not a raster")
        with pytest.raises(SourceError, match=r"a\.tif cannot be opened as a raster"):
            read(path)

    def test_a_file_that_is_not_there(self, tmp_path):
        with pytest.raises(SourceError, match=r"gone\.tif cannot be opened"):
            read(tmp_path / "gone.tif")

    def test_truncated_tiles_name_the_window(self, tmp_path):
        codes = np.random.default_rng(1).integers(0, 9, (256, 256)).astype(np.uint8)
        path = write(tmp_path / "a.tif", codes, tiled=True, blockxsize=64, blockysize=64, compress="deflate")
        path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
        with pytest.raises(SourceError, match=r"read in rows \d+ to \d+, columns 0 to 255.*may be truncated"):
            read(path, strip_rows=64)

    def test_control_points_are_not_a_grid(self, tmp_path):
        path = tmp_path / "a.tif"
        points = [
            rasterio.control.GroundControlPoint(r, c, 9 + c, 50 - r) for r, c in ((0, 0), (0, 4), (3, 0))
        ]
        with rasterio.open(
            path, "w", driver="GTiff", count=1, dtype="uint8", height=3, width=4, gcps=points, crs="EPSG:4326"
        ) as out:
            out.write(CODES, 1)
        with pytest.raises(LayerError, match="control points in place of a transform"):
            read(path)

    def test_an_array_is_read_as_a_file_is(self, tmp_path):
        path = write(tmp_path / "a.tif", nodata=0)
        from_file, _ = read(path, classes={"a": 1}, rest="b")
        from_array, _ = read(ClassMap(CODES, NORTH_UP, UTM, nodata=0), classes={"a": 1}, rest="b")
        assert np.array_equal(from_file, from_array)

    def test_an_array_of_booleans(self):
        names, _ = read(ClassMap(CODES > 1, NORTH_UP, UTM))
        assert np.array_equal(names == "1", CODES > 1)

    @pytest.mark.parametrize("shape", [(0, 3), (2, 2, 2)])
    def test_an_array_that_is_no_table(self, shape):
        with pytest.raises(LayerError, match="this array has the shape"):
            read(ClassMap(np.zeros(shape, np.uint8), NORTH_UP, UTM))

    def test_a_virtual_mosaic_with_a_hole(self, tmp_path):
        write(tmp_path / "a.tif", np.ones((2, 2), np.uint8), nodata=0)
        source = '<SourceFilename relativeToVRT="1">a.tif</SourceFilename><SourceBand>1</SourceBand>'
        piece = (
            f'<SimpleSource>{source}<SrcRect xOff="0" yOff="0" xSize="2" ySize="2"/>'
            '<DstRect xOff="2" yOff="0" xSize="2" ySize="2"/></SimpleSource>'
        )
        (tmp_path / "m.vrt").write_text(
            '<VRTDataset rasterXSize="4" rasterYSize="2"><SRS>EPSG:32632</SRS>'
            "<GeoTransform>500000,10,0,5000000,0,-10</GeoTransform>"
            f'<VRTRasterBand dataType="Byte" band="1"><NoDataValue>0</NoDataValue>{piece}'
            "</VRTRasterBand></VRTDataset>"
        )
        names, _ = read(tmp_path / "m.vrt")
        assert names.tolist() == [["", "", "1", "1"]] * 2


@pytest.mark.parametrize(
    ("columns", "block", "rows"),
    [(8_000, 256, 1_024), (1_000_000, 512, 8), (32_768, 128, 256), (32_768, 512, 171), (10**7, 1, 1)],
)
def test_strips_are_whole_blocks_or_even_parts_of_one(columns, block, rows):
    assert strip_rows(columns, block) == rows


def test_an_opened_raster_can_be_sent_to_another_process(tmp_path):
    raster = open_raster(write(tmp_path / "a.tif", nodata=0), RasterOptions(classes={"a": 1}, rest="b"))
    there = pickle.loads(pickle.dumps(raster))  # noqa: S301 - made a line above
    one, other = (next(iter(sent.strips())).codes for sent in (raster, there))
    assert np.array_equal(one, other)


def test_an_error_in_the_middle_ends_the_reading_thread(tmp_path):
    path = write(tmp_path / "a.tif", np.arange(200, dtype=np.uint8).reshape(100, 2))
    strips = open_raster(path, RasterOptions(strip_rows=1)).strips()
    assert next(strips).codes[0, 0] != NOT_COVERED
    strips.close()
    assert not [thread for thread in threading.enumerate() if thread.name == "strips-ahead"]
