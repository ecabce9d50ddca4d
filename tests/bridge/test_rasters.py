"""Rasters sampled through QGIS, against GDAL's own arrays, scipy's interpolators and identities."""

from functools import partial
from pathlib import Path

import numpy as np
import pytest
from downwarp_checkout.plugin.bridge import rasters
from downwarp_checkout.plugin.bridge.frames import Frame
from downwarp_checkout.plugin.bridge.rasters import RasterReader
from downwarp_checkout.plugin.bridge.tiles import MOST_BYTES, SIDE_BITS, Tiles
from downwarp_checkout.plugin.core.errors import Cancelled, DownwarpError
from downwarp_checkout.plugin.core.transect import Transect
from pyproj import Geod, Transformer
from qgis.core import QgsCoordinateReferenceSystem, QgsRasterLayer, QgsRasterRange
from scipy.interpolate import RegularGridInterpolator
from scipy.ndimage import map_coordinates

gdal = pytest.importorskip("osgeo.gdal")
gdal.UseExceptions()

GLOBAL_RELIEF = Path("/usr/share/ferret-vis/data/etopo5.cdf")
DEGREES = "EPSG:4326"


@pytest.fixture
def frame():
    return Frame.of(QgsCoordinateReferenceSystem(DEGREES), "TRANSECTS")


def write(path, values, left, top, width, height=None, crs=DEGREES, kind=None, nodata=None, scale=None, driver="GTiff"):
    """A raster file with the given cells, rows from the top; returned as a layer."""
    values = np.atleast_3d(values) if values.ndim == 2 else np.moveaxis(values, 0, 2)
    kind = gdal.GDT_Float64 if kind is None else kind
    memory = gdal.GetDriverByName("MEM" if driver != "GTiff" else driver).Create(
        str(path), values.shape[1], values.shape[0], values.shape[2], kind
    )
    memory.SetGeoTransform((left, width, 0, top, 0, -(width if height is None else height)))
    if crs:
        memory.SetProjection(QgsCoordinateReferenceSystem(crs).toWkt())
    for number in range(values.shape[2]):
        band = memory.GetRasterBand(number + 1)
        if nodata is not None:
            band.SetNoDataValue(nodata)
        band.WriteArray(values[:, :, number])
        if scale is not None:
            band.SetScale(scale[0])
            band.SetOffset(scale[1])
    if driver != "GTiff":
        gdal.GetDriverByName(driver).CreateCopy(str(path), memory)
    del memory, band
    return QgsRasterLayer(str(path), "relief")


def relief(longitude, latitude):
    """An invented smooth relief, m up, periodic in longitude."""
    east, north = np.radians(longitude), np.radians(latitude)
    return -4000.0 + 1500.0 * np.sin(3 * east) * np.cos(2 * north) + 700.0 * np.cos(5 * east + 1.0)


def global_grid(path, first, step=1.0, columns=None):
    """The invented relief in cells of ``step`` degrees, the first column centred on ``first``."""
    columns = round(360 / step) if columns is None else columns
    rows = round(180 / step)
    longitude = first + step * np.arange(columns)
    latitude = 90 - step * (np.arange(rows) + 0.5)
    return write(path, relief(longitude, latitude[:, None]), first - step / 2, 90.0, step)


def test_agrees_with_scipy_between_cell_centres(tmp_path, frame):
    """Independent reference: scipy.ndimage.map_coordinates (order 1) on the array that was written."""
    random = np.random.default_rng(11)
    values = random.normal(size=(600, 700))
    reader = RasterReader(write(tmp_path / "a.tif", values, 5.0, 50.0, 0.01), 1, frame)
    longitude, latitude = random.uniform(5.005, 11.995, (4, 500)), random.uniform(44.005, 49.995, (4, 500))
    expected = map_coordinates(values, [(50.0 - latitude) / 0.01 - 0.5, (longitude - 5.0) / 0.01 - 0.5], order=1)
    np.testing.assert_allclose(reader.sample(longitude, latitude), expected, rtol=0, atol=1e-8)


@pytest.mark.parametrize("bits", [0, 3, 6, 8])
@pytest.mark.parametrize(("left", "width"), [(-0.041667052558463, 0.083334105116925), (1 / 3, 1 / 7), (-17.3, 0.1)])
def test_windows_are_the_cells_asked_for(tmp_path, frame, monkeypatch, bits, left, width):
    """Every cell numbered and asked for at its centre, with cell sizes that binary fractions cannot hold."""
    monkeypatch.setattr(rasters, "Tiles", partial(Tiles, side_bits=bits))
    numbers = np.arange(61 * 83, dtype=float).reshape(61, 83)
    reader = RasterReader(write(tmp_path / "a.tif", numbers, left, 30.0, width), 1, frame)
    longitude = left + width * (np.arange(83) + 0.5)
    latitude = 30.0 - width * (np.arange(61) + 0.5)
    np.testing.assert_allclose(reader.sample(longitude, latitude[:, None]), numbers, rtol=0, atol=1e-6)


@pytest.mark.parametrize(
    ("kind", "dtype"),
    [
        ("Byte", np.uint8), ("UInt16", np.uint16), ("Int16", np.int16), ("UInt32", np.uint32),
        ("Int32", np.int32), ("Float32", np.float32), ("Float64", np.float64),
    ],
)
def test_types_of_cells(tmp_path, frame, kind, dtype):
    """The extremes of each type, and a value for "no data", as GDAL wrote them."""
    limits = np.iinfo(dtype) if np.issubdtype(dtype, np.integer) else np.finfo(dtype)
    values = np.array([[limits.min, limits.max], [3, 7]], dtype=dtype)
    layer = write(tmp_path / "a.tif", values, 0.0, 2.0, 1.0, kind=getattr(gdal, f"GDT_{kind}"), nodata=7)
    values = values.astype(float)
    values[1, 1] = np.nan
    result = RasterReader(layer, 1, frame).sample(np.array([0.5, 1.5]), np.array([[1.5], [0.5]]))
    np.testing.assert_allclose(result, values, rtol=1e-12)


def test_ascii_grids(tmp_path, frame):
    (tmp_path / "a.asc").write_text(
        "ncols 3\nnrows 2\nxllcorner 10\nyllcorner 40\ncellsize 1\nNODATA_value -9999\n1 2 -9999\n4 5.5 6\n"
    )
    reader = RasterReader(
        QgsRasterLayer(str(tmp_path / "a.asc"), "a"), 1, frame, crs=QgsCoordinateReferenceSystem(DEGREES)
    )
    result = reader.sample(np.array([10.5, 11.5, 12.5]), np.array([[41.5], [40.5]]))
    np.testing.assert_allclose(result, [[1, 2, np.nan], [4, 5.5, 6]])


def test_scale_and_offset_apply(tmp_path, frame):
    """value = raw x scale + offset (GDAL's raster data model); "no data" is declared raw."""
    raw = np.array([[100, 200], [300, -32768]])
    layer = write(tmp_path / "a.tif", raw, 0.0, 2.0, 1.0, kind=gdal.GDT_Int16, nodata=-32768, scale=(0.5, -1000.0))
    result = RasterReader(layer, 1, frame).sample(np.array([0.5, 1.5]), np.array([[1.5], [0.5]]))
    np.testing.assert_allclose(result, [[-950.0, -900.0], [-850.0, np.nan]])


@pytest.mark.parametrize(
    ("nodata", "expected"), [(None, [[np.nan, 2], [3, np.nan]]), (3.0, [[np.nan, 2], [np.nan, np.nan]])]
)
def test_what_the_user_declares_as_no_data_is_missing(tmp_path, frame, nodata, expected):
    layer = write(tmp_path / "a.tif", np.array([[1.0, 2.0], [3.0, 4.0]]), 0.0, 2.0, 1.0, nodata=nodata)
    open_range = QgsRasterRange(2.0, 2.5, QgsRasterRange.BoundsType.Exclusive)
    layer.dataProvider().setUserNoDataValue(1, [QgsRasterRange(0.0, 1.0), open_range, QgsRasterRange(4.0, 4.0)])
    result = RasterReader(layer, 1, frame).sample(np.array([0.5, 1.5]), np.array([[1.5], [0.5]]))
    np.testing.assert_allclose(result, expected)


def test_source_no_data_that_is_switched_off_counts_as_a_value(tmp_path, frame):
    layer = write(tmp_path / "a.tif", np.array([[1.0, 2.0], [3.0, 4.0]]), 0.0, 2.0, 1.0, nodata=4.0)
    layer.dataProvider().setUseSourceNoDataValue(1, False)
    reader = RasterReader(layer, 1, frame)
    assert reader.sample(1.5, 0.5) == 4.0
    np.testing.assert_array_equal(reader.sample(np.array([2.5, 1.0]), np.array([0.5, -0.5])), [np.nan, np.nan])


def test_holes_and_edges(tmp_path, frame):
    """3 x 3 cells of 1 degree, a hole in the middle: near it the others are blended, on it there is nothing."""
    values = np.arange(9.0).reshape(3, 3)
    values[1, 1] = -1.0
    reader = RasterReader(write(tmp_path / "a.tif", values, 0.0, 3.0, 1.0, nodata=-1.0), 1, frame)
    longitude, latitude = np.array([1.5, 1.9, 2.25, 0.0, 3.0, 3.1, 0.5]), np.array([1.5, 1.5, 1.5, 3.0, 0.0, 1.5, 3.2])
    result = reader.sample(longitude, latitude)
    np.testing.assert_allclose(result, [np.nan, np.nan, 5.0, 0.0, 8.0, np.nan, np.nan])


def test_units_and_bands(tmp_path, frame):
    """A foot is 0.3048 m and a US survey foot 1200/3937 m by definition."""
    layer = write(tmp_path / "a.tif", np.stack([np.full((2, 2), 10.0), np.full((2, 2), 20.0)]), 0.0, 2.0, 1.0)
    for unit, factor in enumerate((1.0, 0.3048, 0.3048006096012192, 1000.0)):
        assert RasterReader(layer, 2, frame, unit=unit).sample(1.0, 1.0) == pytest.approx(20 * factor, rel=1e-15)
    assert RasterReader(layer, 1, frame).sample(1.0, 1.0) == 10.0


@pytest.mark.parametrize("first", [0.0, 0.5, -180.0, -179.5, 20.25, 180.0])
def test_a_global_grid_gives_the_same_wherever_it_starts(tmp_path, frame, first):
    """Against bilinear interpolation on a grid repeated three times (RegularGridInterpolator), at any longitude."""
    random = np.random.default_rng(12)
    longitude, latitude = random.uniform(-200, 380, 2000), random.uniform(-89.4, 89.4, 2000)
    result = RasterReader(global_grid(tmp_path / "a.tif", first), 1, frame).sample(longitude, latitude)
    columns = first + np.arange(-720.0, 1080.0)
    rows = np.arange(-89.5, 90.0)
    reference = RegularGridInterpolator((rows, columns), relief(columns, rows[:, None]))
    np.testing.assert_allclose(result, reference(np.column_stack([latitude, longitude])), rtol=0, atol=1e-7)


def test_a_global_grid_with_its_first_column_repeated_or_cut_short(tmp_path, frame):
    """361 columns; and a cell size rounded so that the grid spans 359.99 or 360.003 degrees: no gap at the seam."""
    longitude = np.linspace(-1.0, 1.0, 41)
    exact = RasterReader(global_grid(tmp_path / "a.tif", 0.0), 1, frame).sample(longitude, 12.3)
    repeated = RasterReader(global_grid(tmp_path / "b.tif", 0.0, columns=361), 1, frame).sample(longitude, 12.3)
    np.testing.assert_allclose(repeated, exact, rtol=0, atol=1e-9)
    centres, latitude = np.arange(360.0), 89.5 - np.arange(180)
    for name, size in (("c", 359.99 / 360), ("d", 360.003 / 360)):
        layer = write(tmp_path / f"{name}.tif", relief(centres, latitude[:, None]), -0.5, 90.0, size, 1.0)
        np.testing.assert_allclose(RasterReader(layer, 1, frame).sample(longitude, 12.3), exact, rtol=0, atol=2.0)


def test_a_regional_grid_has_no_seam(tmp_path, frame):
    """Columns 170 to 190 E, in either way of counting; nothing elsewhere, nor in the gap of a 350 degree grid."""
    reader = RasterReader(global_grid(tmp_path / "a.tif", 170.5, columns=20), 1, frame)
    one, other = reader.sample(np.array([185.3, 179.9]), 3.0), reader.sample(np.array([-174.7, -180.1]), 3.0)
    np.testing.assert_allclose(one, other, rtol=0, atol=1e-9)
    assert np.isfinite(reader.sample(np.array([170.0, 190.0, -170.0, 530.1]), 3.0)).all()
    assert np.isnan(reader.sample(np.array([169.9, 190.1, 0.0, -169.9]), 3.0)).all()
    reader = RasterReader(global_grid(tmp_path / "b.tif", 0.5, columns=350), 1, frame)
    np.testing.assert_array_equal(
        np.isnan(reader.sample(np.array([-0.1, 0.0, 349.9, 350.1, 355.0, 359.9]), 3.0)), [1, 0, 0, 1, 1, 1]
    )


def test_a_projected_raster_is_reached_through_its_crs(tmp_path, frame):
    """z = 2 x - 3 y in UTM metres is exact under bilinear interpolation; pyproj gives x and y of the places."""
    x, y = 400e3 + 1e3 * (np.arange(200) + 0.5), 5200e3 - 1e3 * (np.arange(150) + 0.5)
    layer = write(tmp_path / "a.tif", 2 * x - 3 * y[:, None], 400e3, 5200e3, 1e3, crs="EPSG:32633")
    random = np.random.default_rng(13)
    longitude, latitude = random.uniform(14.0, 16.0, 100), random.uniform(45.8, 46.8, 100)
    east, north = Transformer.from_crs(DEGREES, "EPSG:32633", always_xy=True).transform(longitude, latitude)
    result = RasterReader(layer, 1, frame).sample(longitude + 360.0, latitude)
    np.testing.assert_allclose(result, 2 * east - 3 * north, rtol=0, atol=1e-5)


def test_a_datum_other_than_the_lines_is_shifted(tmp_path):
    """A raster in NTF (Paris) grads, a line in WGS 84: places move as PROJ moves them."""
    paris = Transformer.from_crs(DEGREES, "EPSG:4807", always_xy=True)
    x, y = np.arange(0.05, 4, 0.1), np.arange(54.95, 50, -0.1)
    layer = write(tmp_path / "a.tif", 100 * x + 7 * y[:, None], 0.0, 55.0, 0.1, crs="EPSG:4807")
    reader = RasterReader(layer, 1, Frame.of(QgsCoordinateReferenceSystem(DEGREES), "TRANSECTS"))
    longitude, latitude = np.array([3.0, 4.5]), np.array([46.0, 48.0])
    east, north = paris.transform(longitude, latitude)
    np.testing.assert_allclose(reader.sample(longitude, latitude), 100 * east + 7 * north, rtol=0, atol=1e-7)


def test_rows_from_the_bottom_are_read_upright(tmp_path, frame):
    """A file whose first row is its southernmost (a positive row step in its geotransform)."""
    values = np.arange(12.0).reshape(3, 4)
    layer = write(tmp_path / "a.tif", values, 0.0, 10.0, 1.0, -1.0)
    result = RasterReader(layer, 1, frame).sample(np.arange(4) + 0.5, np.array([[10.5], [11.5], [12.5]]))
    np.testing.assert_allclose(result, values)


def test_a_rotated_raster_is_read_as_qgis_shows_it(tmp_path, frame):
    """Cells of 0.01 degree turned by 20 degrees, values on the plane 100 x + 50 y: resampled by QGIS to the nearest
    cell, hence off by at most half a cell's diagonal, 0.0071 degrees, times the slope of 111.8 per degree; outside the
    file's own corners there is no data."""
    turn, size = np.radians(20.0), 0.01
    geotransform = (10.0, size * np.cos(turn), size * np.sin(turn), 50.0, size * np.sin(turn), -size * np.cos(turn))

    def place(row, column):
        east = geotransform[0] + column * geotransform[1] + row * geotransform[2]
        return east, geotransform[3] + column * geotransform[4] + row * geotransform[5]

    def plane(east, north):
        return 100.0 * east + 50.0 * north

    rows, columns = np.mgrid[0:400, 0:400] + 0.5
    write(tmp_path / "a.tif", plane(*place(rows, columns)), 0.0, 0.0, 1.0, nodata=-9999.0)
    source = gdal.Open(str(tmp_path / "a.tif"), gdal.GA_Update)
    source.SetGeoTransform(geotransform)
    del source
    layer = QgsRasterLayer(str(tmp_path / "a.tif"), "relief")
    reader = RasterReader(layer, 1, frame)
    random = np.random.default_rng(15)
    east, north = place(*random.uniform(5.0, 395.0, (2, 500)))
    assert np.abs(reader.sample(east, north) - plane(east, north)).max() < 0.0071 * 111.8 * 1.05
    extent = layer.extent()
    assert np.isnan(reader.sample(extent.xMinimum() + 0.02, extent.yMaximum() - 0.02))


def test_a_global_line_over_a_huge_raster_reads_few_cells(tmp_path, frame, monkeypatch):
    """1.8e9 cells: a 20,000 km line reads tiles of 128 by 128 cells, none twice, under a hundredth of all."""
    path = str(tmp_path / "a.tif")
    options = ["SPARSE_OK=TRUE", "TILED=YES"]
    source = gdal.GetDriverByName("GTiff").Create(path, 60_000, 30_000, 1, gdal.GDT_Byte, options)
    source.SetGeoTransform((-180, 0.006, 0, 90, 0, -0.006))
    source.SetProjection(QgsCoordinateReferenceSystem(DEGREES).toWkt())
    del source
    windows = watched_reads(monkeypatch)
    stations = Transect("A", [[10.0, -60.0], [-170.5, 61.0]], Geod(ellps="WGS84")).stations(1e3)
    assert stations.distance.size > 19_000
    result = RasterReader(QgsRasterLayer(path, "huge"), 1, frame).sample(stations.longitude, stations.latitude)
    assert (result == 0.0).all()
    cells = [rows * columns for _, _, rows, columns in windows]
    assert max(cells) == 128 * 128
    assert sum(cells) < 1.8e7
    assert len(set(windows)) == len(windows)


def watched_reads(monkeypatch):
    """Windows that readers made from now on ask their provider for, as (top, left, rows, columns)."""
    windows = []
    read = RasterReader._read

    def watched(self, *window):
        windows.append(window)
        return read(self, *window)

    monkeypatch.setattr(RasterReader, "_read", watched)
    return windows


def test_neighbouring_lines_share_what_is_read(tmp_path, frame, monkeypatch):
    """40 parallel lines 10 km apart with swaths of 5 lines over 20 km, twice: every tile that they touch is read once,
    so that no cell is read twice, and values are those of lines read alone, to the last bit."""
    layer = global_grid(tmp_path / "a.tif", 0.05, step=0.1)
    windows = watched_reads(monkeypatch)
    reader = RasterReader(layer, 1, frame)
    lines = [Transect(str(at), [[10.0, at], [14.5, at + 1.0]], Geod(ellps="WGS84")) for at in 45 + 0.09 * np.arange(40)]
    places = [line.offset(line.stations(5e3), np.linspace(-8e3, 8e3, 5)) for line in lines]
    together = [reader.sample(*place) for place in places]
    cells = sum(rows * columns for _, _, rows, columns in windows)
    seen = set(windows)
    assert len(seen) == len(windows)
    again = [reader.sample(*place) for place in places]
    assert set(windows) == seen
    assert sum(rows * columns for _, _, rows, columns in windows) == cells
    longitude, latitude = (np.concatenate([place[part].ravel() for place in places]) for part in (0, 1))
    rows, columns = np.floor((90 - latitude) / 0.1 - 0.5), np.floor((longitude - 0.0) / 0.1 - 0.5)
    side = 1 << SIDE_BITS
    touched = {
        (int(row + down) // side, int(column + right) // side)
        for row, column in zip(rows, columns)
        for down in (0, 1)
        for right in (0, 1)
    }
    assert {(top // side, left // side) for top, left, _, _ in windows} == touched
    alone = [RasterReader(layer, 1, frame).sample(*place) for place in places]
    for one, other, third in zip(together, again, alone):
        assert one.tobytes() == other.tobytes() == third.tobytes()


def test_what_is_kept_is_bounded(tmp_path, frame, monkeypatch):
    """Room for 9 tiles of 8 x 8 cells: a whole grid, a line that comes back, and lines within the room; what is kept
    never takes more, values are the same, and only what has been pushed out is read again."""
    layer = global_grid(tmp_path / "a.tif", 0.5)
    longitude, latitude = np.meshgrid(np.arange(2.0, 340.0, 3.0), np.arange(-80.0, 80.0, 3.0))
    whole = RasterReader(layer, 1, frame).sample(longitude, latitude)
    monkeypatch.setattr(rasters, "Tiles", partial(Tiles, side_bits=3, most_bytes=9 * 8 * 8 * 8))
    windows = watched_reads(monkeypatch)
    reader = RasterReader(layer, 1, frame)
    assert reader.sample(longitude, latitude).tobytes() == whole.tobytes()
    assert reader._tiles._pool.nbytes <= 9 * 8 * 8 * 8
    assert len(reader._tiles._kept) == 9
    assert len(set(windows)) == len(windows)
    windows.clear()
    near = np.linspace(100.6, 110.4, 50)
    first = reader.sample(near, 11.0)
    fresh = len(windows)
    assert 0 < fresh <= 4
    assert reader.sample(near[::-1], 11.0)[::-1].tobytes() == first.tobytes()
    assert len(windows) == fresh
    reader.sample(longitude, latitude)
    windows.clear()
    reader.sample(near, 11.0)
    assert len(windows) == fresh


def test_memory_of_a_band_is_some_tens_of_megabytes(tmp_path, frame):
    """Whatever the type of the cells and however large the raster."""
    for kind in ("Byte", "Int32", "Float64"):
        layer = write(tmp_path / f"{kind}.tif", np.zeros((1200, 3600)), 0.0, 60.0, 0.1, kind=getattr(gdal, f"GDT_{kind}"))
        reader = RasterReader(layer, 1, frame)
        reader.sample(*np.meshgrid(np.arange(1.0, 359.0, 0.5), np.arange(-59.0, 59.0, 0.5)))
        assert reader._tiles._pool.nbytes <= MOST_BYTES == 32 * 2**20


def test_points_beyond_what_memory_holds_at_once(tmp_path, frame, monkeypatch):
    layer = global_grid(tmp_path / "a.tif", 0.5)
    random = np.random.default_rng(14)
    longitude, latitude = random.uniform(-180, 180, (10, 33)), random.uniform(-90, 90, (10, 33))
    whole = RasterReader(layer, 1, frame).sample(longitude, latitude)
    monkeypatch.setattr(rasters, "_POINTS_AT_ONCE", 50)
    fractions = []
    parts = RasterReader(layer, 1, frame).sample(longitude, latitude, fractions.append)
    np.testing.assert_array_equal(parts, whole)
    assert fractions == sorted(fractions)
    assert fractions[0] == 0.0
    assert 0.8 < fractions[-1] < 1.0


def test_progress_can_stop_the_reading(tmp_path, frame):
    def stop(fraction):
        raise Cancelled

    with pytest.raises(Cancelled):
        RasterReader(global_grid(tmp_path / "a.tif", 0.5), 1, frame).sample(10.0, 10.0, stop)


def test_the_reader_outlives_its_layer(tmp_path, frame):
    layer = global_grid(tmp_path / "a.tif", 0.5)
    reader = RasterReader(layer, 1, frame)
    expected = reader.sample(10.25, 10.25)
    del layer
    assert reader.sample(10.25, 10.25) == expected


def test_cell_size(tmp_path, frame):
    """1 degree at latitude 60 (Geod.inv): the root of width times height; also at the poles' rows, and in metres."""
    reader = RasterReader(global_grid(tmp_path / "a.tif", 0.5), 1, frame)
    geod = Geod(ellps="WGS84")
    width, height = geod.inv(10, 59.5, 11, 59.5)[2], geod.inv(10, 59.5, 10, 58.5)[2]
    assert reader.cell_size_m(10.3, 59.7) == pytest.approx(np.sqrt(width * height), rel=1e-9)
    assert np.isfinite(reader.cell_size_m(np.array([0.0, 360.0, -180.0]), np.array([90.0, -90.0, 0.0]))).all()
    values = np.zeros((50, 50))
    reader = RasterReader(write(tmp_path / "b.tif", values, 480e3, 5e6, 250.0, crs="EPSG:32633"), 1, frame)
    size = reader.cell_size_m(np.array([[14.85, 0.0]]), np.array([[45.1, 45.1]]))
    assert size.shape == (1, 2)
    assert size[0, 0] == pytest.approx(250.0 / 0.9996, rel=1e-4)  # UTM's scale on its central meridian
    assert np.isnan(size[0, 1])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"band": 3}, "DEM_BAND is 3; it takes a number from 1 up to 2"),
        ({"band": 0}, "DEM_BAND is 0"),
        ({"band": 1.5}, "DEM_BAND is 1.5; it takes a whole number"),
        ({"unit": 4}, "RELIEF_UNIT is 4"),
        ({"layer": None}, "DEM is not a raster that can be read"),
        ({"layer": QgsRasterLayer("/no/such/file.tif", "none")}, "DEM is not a raster that can be read"),
    ],
)
def test_rasters_that_cannot_be_used(tmp_path, frame, arguments, message):
    layer = write(tmp_path / "a.tif", np.zeros((2, 3, 3)), 0.0, 2.0, 1.0)
    with pytest.raises(DownwarpError, match=message):
        RasterReader(**{"layer": layer, "band": 1, "frame": frame, **arguments})


def test_a_raster_without_crs(tmp_path, frame):
    values = np.arange(4.0).reshape(2, 2)
    layer = write(tmp_path / "a.tif", values, 400e3, 5200e3, 1e3, crs=None)
    layer.setCrs(QgsCoordinateReferenceSystem())
    with pytest.raises(DownwarpError, match="DEM carries no CRS: give it as DEM_CRS"):
        RasterReader(layer, 1, frame)
    reader = RasterReader(layer, 1, frame, crs=QgsCoordinateReferenceSystem("EPSG:32633"))
    place = Transformer.from_crs("EPSG:32633", DEGREES, always_xy=True).transform(401e3, 5199e3)
    assert reader.sample(*place) == pytest.approx(1.5, abs=1e-6)


def test_numbers_with_an_imaginary_part_are_no_relief(tmp_path, frame):
    layer = write(tmp_path / "a.tif", np.zeros((2, 2)), 0.0, 2.0, 1.0, kind=gdal.GDT_CFloat32)
    with pytest.raises(DownwarpError, match="DEM has band 1 in a type that holds no plain numbers"):
        RasterReader(layer, 1, frame)


def test_places_that_the_rasters_crs_cannot_express(tmp_path, frame):
    """An orthographic view from above 0 N 0 E does not show 180 E: such a place has no value, and only such places are
    an error."""
    crs = QgsCoordinateReferenceSystem()
    crs.createFromProj("+proj=ortho +lat_0=0 +lon_0=0 +datum=WGS84 +units=m +no_defs")
    reader = RasterReader(write(tmp_path / "a.tif", np.ones((4, 4)), -2e6, 2e6, 1e6), 1, frame, crs=crs)
    np.testing.assert_array_equal(reader.sample(np.array([180.0, 1.0]), np.array([0.0, 2.0])), [np.nan, 1.0])
    with pytest.raises(DownwarpError, match=r"DEM has CRS .*, into which no station can be brought"):
        reader.sample(np.array([180.0, np.nan]), np.array([0.0, 1.0]))


def test_no_places(tmp_path, frame):
    reader = RasterReader(global_grid(tmp_path / "a.tif", 0.5), 1, frame)
    assert reader.sample(np.empty((0, 3)), np.empty((0, 3))).shape == (0, 3)


@pytest.mark.skipif(not GLOBAL_RELIEF.exists(), reason="needs the Debian package ferret-datasets")
def test_global_relief_across_its_seam(tmp_path, frame):
    """5-minute global relief (ferret-datasets), longitudes 0 to 359.9, without CRS: a line through Greenwich.

    Reference: the array as GDAL reads it, its seam closed by repeating columns; and the same cells as -180..180.
    """
    crs = QgsCoordinateReferenceSystem(DEGREES)
    layer = QgsRasterLayer(str(GLOBAL_RELIEF), "relief")
    reader = RasterReader(layer, 1, frame, crs=crs)
    stations = Transect("A", [[-6.0, 47.0], [5.0, 60.0]], Geod(ellps="WGS84")).stations(2e3)
    result = reader.sample(stations.longitude, stations.latitude)
    assert np.isfinite(result).all()
    source = gdal.Open(str(GLOBAL_RELIEF))
    cells = source.ReadAsArray()
    left, width, _, top, _, height = source.GetGeoTransform()
    wrapped = np.hstack([cells[:, -200:], cells[:, :200]]).astype(float)
    centres = left + width * (np.arange(4320) + 0.5)
    columns = np.concatenate([centres[-200:] - 360.0, centres[:200]])
    rows = top + height * (np.arange(2161) + 0.5)
    reference = RegularGridInterpolator((rows[::-1], columns), wrapped[::-1])
    expected = reference(np.column_stack([stations.latitude, stations.longitude]))
    np.testing.assert_allclose(result, expected, rtol=0, atol=1e-3)
    assert (np.abs(stations.longitude) < 0.05).any()

    true_width = 1 / 12
    turned = write(tmp_path / "a.tif", np.roll(cells, 2160, axis=1), -180 - true_width / 2, top, true_width)
    plain = write(tmp_path / "b.tif", cells, -true_width / 2, top, true_width)
    antimeridian = Transect("B", [[172.0, -40.0], [-165.0, -20.0]], Geod(ellps="WGS84")).stations(2e3)
    for line in (stations, antimeridian):
        one, other = (RasterReader(each, 1, frame).sample(line.longitude, line.latitude) for each in (turned, plain))
        np.testing.assert_allclose(one, other, rtol=0, atol=1e-6)
    assert one.min() < -7000.0  # it crosses a trench
