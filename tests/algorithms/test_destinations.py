"""Where results go: the same values in every format, a sentence where one cannot hold them, nothing half done."""

import os
import sqlite3

import invented
import pytest

pytest.importorskip("qgis")

from downwarp_checkout.plugin.bridge import destinations, outputs
from downwarp_checkout.plugin.core.errors import Cancelled
from invented import STEP_KM, equator_grid, equator_line, lines_layer
from osgeo import gdal, ogr
from qgis.core import QgsProcessingException, QgsVectorLayer
from running import Quiet, refusal, rows, run

LAYERS = ("PROFILES", "STATIONS", "MARKERS")
TABLES = ("PARAMETERS", "MISFIT")


@pytest.fixture(scope="module")
def keys(tmp_path_factory):
    """A trench and a line across it, the window wide enough for one quick fit."""
    folder = tmp_path_factory.mktemp("trench")
    dem = equator_grid(folder / "dem.tif", 20.0, invented.trench)
    return {"TRANSECTS": lines_layer([equator_line(20.0)]), "DEM": dem, "SETTING": 1, "STEP_KM": 3 * STEP_KM}


@pytest.fixture(scope="module")
def in_memory(keys):
    """The results as layers in memory."""
    return run("fittransects", keys, sinks=LAYERS + TABLES)


def numbers(table: list[dict]) -> list[list]:
    """Rows as lists, without what a format adds (an id) or does not tell apart: text and numbers, nothing and NULL."""
    found = []
    for row in table:
        values = []
        for name, value in row.items():
            if name in ("fid", "geometry"):
                continue
            try:
                values.append(float(value))
            except (TypeError, ValueError):
                values.append(value or None)
        found.append(values)
    return found


@pytest.mark.parametrize("extension", ["gpkg", "fgb", "csv", "xlsx"])
def test_values_are_the_same_in_every_format(keys, in_memory, tmp_path, extension):
    """Names and values of each file are those of the layers in memory, to the last but one of 16 digits."""
    names = LAYERS if extension == "fgb" else LAYERS + TABLES
    run("fittransects", {**keys, **{name: str(tmp_path / f"{name.lower()}.{extension}") for name in names}}, sinks=())
    for name in names:
        written = rows(str(tmp_path / f"{name.lower()}.{extension}"))
        expected = in_memory[name]
        assert [key for key in written[0] if key != "fid"] == list(expected[0])
        assert len(written) == len(expected)
        for got, wanted in zip(numbers(written), numbers(expected)):
            assert _same(got, wanted), name
        if extension in ("gpkg", "fgb") and name in LAYERS:
            assert [row["geometry"].asWkb().data() for row in written] == [
                row["geometry"].asWkb().data() for row in expected
            ]
    assert sorted(path.suffix for path in tmp_path.iterdir()) == [f".{extension}"] * len(names)


def _same(got: list, wanted: list) -> bool:
    return all(
        one == other or (isinstance(one, float) and isinstance(other, float) and abs(one - other) <= 1e-14 * abs(other))
        for one, other in zip(got, wanted)
    )


@pytest.mark.parametrize(
    ("file", "words"),
    [
        ("out.shp", "PROFILES cannot be out.shp: a Shapefile cuts field names at 10 characters"),
        ("out.dbf", "PROFILES cannot be out.dbf: a dBase table cuts field names at 10 characters"),
        ("out.tab", "PROFILES cannot be out.tab: a MapInfo table turns missing numbers into 0"),
        ("out.geojson", "PROFILES cannot be out.geojson: GeoJSON loses points whose elevation is not known"),
        ("out.kml", "PROFILES cannot be out.kml: .kml is not among the formats that hold all names and numbers"),
        ("none/out.gpkg", "PROFILES cannot be written: there is no folder"),
        ("folder.gpkg", "PROFILES cannot be written: "),
    ],
)
def test_refused_before_the_work_begins(keys, tmp_path, file, words):
    """One sentence, and nothing is made."""
    (tmp_path / "folder.gpkg").mkdir()
    before = sorted(tmp_path.rglob("*"))
    said = refusal("fittransects", {**keys, "PROFILES": str(tmp_path / file)}, sinks=("STATIONS",))
    assert words in said
    assert "Traceback" not in said
    assert sorted(tmp_path.rglob("*")) == before


def test_table_is_no_flatgeobuf(keys, tmp_path):
    """FlatGeobuf drops rows without geometry, so a table of them is refused."""
    said = refusal("fittransects", {**keys, "MISFIT": str(tmp_path / "misfit.fgb")})
    assert "MISFIT cannot be misfit.fgb: FlatGeobuf holds no rows without geometry" in said


def test_failed_transect_that_a_flatgeobuf_leaves_out_is_told(keys, tmp_path):
    """Its row of PROFILES has no geometry; a warning says that it is not there, and a GeoPackage holds it."""
    lines = lines_layer([equator_line(20.0), [(70, 40), (75, 40)]])
    feedback = Quiet()
    target = str(tmp_path / "profiles.fgb")
    run("fittransects", {**keys, "TRANSECTS": lines, "PROFILES": target}, feedback)
    assert [row["transect"] for row in rows(target)] == ["1"]
    assert any("holds no rows without geometry: 1 left out" in words for words in feedback.warnings)
    target = str(tmp_path / "profiles.gpkg")
    run("fittransects", {**keys, "TRANSECTS": lines, "PROFILES": target})
    assert [row["transect"] for row in rows(target)] == ["1", "2"]


@pytest.mark.parametrize("name", ['it\'s a "plate" & more; -- 100%.gpkg', "плита 板 ðé.gpkg", "a'); DROP TABLE x.csv"])
def test_paths_with_spaces_quotes_and_other_letters(keys, tmp_path, name):
    """Folder and file are called anything that the file system takes; the layer is there and reads."""
    folder = tmp_path / f"in {name}"
    folder.mkdir()
    results = run("fittransects", {**keys, "PROFILES": str(folder / name)})
    assert results["PROFILES"] == str(folder / name)
    assert len(rows(results["PROFILES"])) == 1
    assert [path.name for path in folder.iterdir()] == [name]


def test_two_outputs_or_an_input_in_one_file_are_refused(keys, tmp_path):
    """The second would replace the first; the input would be gone."""
    target = str(tmp_path / "out.gpkg")
    said = refusal("fittransects", {**keys, "PROFILES": target, "STATIONS": target}, sinks=())
    assert "would overwrite" in said
    run("laytransects", {"GUIDE": keys["TRANSECTS"], "SPACING_KM": 100, "TRANSECTS": target}, sinks=())
    before = (tmp_path / "out.gpkg").read_bytes()
    for given in (target, f"{target}|layername=out", QgsVectorLayer(target, "lines", "ogr")):
        said = refusal("fittransects", {**keys, "TRANSECTS": given, "PROFILES": target})
        assert "PROFILES would overwrite TRANSECTS" in said
    assert (tmp_path / "out.gpkg").read_bytes() == before


def test_a_link_stays_a_link(keys, tmp_path):
    """What a link points to is replaced, not the link."""
    (tmp_path / "real").mkdir()
    (tmp_path / "link.gpkg").symlink_to(tmp_path / "real" / "out.gpkg")
    results = run("fittransects", {**keys, "PROFILES": str(tmp_path / "link.gpkg")})
    assert results["PROFILES"] == str(tmp_path / "link.gpkg")
    assert (tmp_path / "link.gpkg").is_symlink()
    assert len(rows(str(tmp_path / "real" / "out.gpkg"))) == 1


def test_unknown_or_missing_extension_becomes_a_geopackage(keys, tmp_path):
    """As QGIS does: the name keeps what it has and gets .gpkg."""
    for name in ("plain", "odd.v2"):
        results = run("fittransects", {**keys, "PROFILES": str(tmp_path / name)})
        assert results["PROFILES"] == str(tmp_path / f"{name}.gpkg")
        assert len(rows(results["PROFILES"])) == 1


def test_table_of_a_geopackage_is_replaced_and_the_others_stay(keys, tmp_path):
    """``ogr:dbname=... table=...`` adds to a GeoPackage; a second run replaces its own table only."""
    database = tmp_path / "all.gpkg"
    created = gdal.GetDriverByName("GPKG").Create(str(database), 0, 0, 0)
    layer = created.CreateLayer("mine")
    layer.CreateFeature(ogr.Feature(layer.GetLayerDefn()))
    layer = created = None
    target = f"ogr:dbname='{database}' table=\"fitted\" (geom)"
    for te_to in (60, 80):
        results = run("fittransects", {**keys, "PROFILES": target, "TE_TO": te_to})
        assert results["PROFILES"] == f"{database}|layername=fitted"
        assert len(rows(f"{database}|layername=mine")) == 1
        assert len(rows(f"{database}|layername=fitted")) == 1
    assert [path.name for path in tmp_path.iterdir()] == ["all.gpkg"]


def test_run_that_fails_while_it_writes_leaves_earlier_files(keys, tmp_path, monkeypatch):
    """Cancelled, or refused by the sink, between two rows: the earlier file's bytes are as they were."""
    targets = {name: str(tmp_path / f"{name.lower()}.gpkg") for name in LAYERS}
    run("fittransects", {**keys, **targets}, sinks=())
    before = {path: path.read_bytes() for path in tmp_path.iterdir()}
    written = outputs.Outputs.add

    def cancelled(self, name, row, geometry=None):
        if name == "MARKERS":
            raise Cancelled
        written(self, name, row, geometry)

    monkeypatch.setattr(outputs.Outputs, "add", cancelled)
    with pytest.raises(QgsProcessingException, match="Cancelled"):
        run("fittransects", {**keys, **targets, "TE_TO": 60}, sinks=())
    assert {path: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_cancelled_at_any_moment_leaves_earlier_files(keys, tmp_path):
    """Cancelled at each sign of progress: a refusal, and the earlier files' bytes."""
    targets = {name: str(tmp_path / f"{name.lower()}.{kind}") for name, kind in zip(LAYERS, ("gpkg", "fgb", "csv"))}
    watching = Quiet()
    run("fittransects", {**keys, **targets}, watching, sinks=())
    before = {path: path.read_bytes() for path in tmp_path.iterdir()}
    moments = len(watching.fractions)
    assert moments >= 5
    for moment in range(moments):
        feedback = Quiet()

        def count(fraction, feedback=feedback, moment=moment):
            if len(feedback.fractions) > moment:
                feedback.cancel()

        feedback.progressChanged.connect(count)
        try:
            run("fittransects", {**keys, **targets, "TE_TO": 60}, feedback, sinks=())
        except QgsProcessingException as error:
            assert "Cancelled" in str(error)
            assert {path: path.read_bytes() for path in tmp_path.iterdir()} == before
        else:
            # The last sign of progress comes once all is written.
            assert moment >= moments - 2
            assert sorted(tmp_path.iterdir()) == sorted(before)


def test_file_that_cannot_be_put_into_place_is_said(keys, tmp_path, monkeypatch):
    """As where another program holds it open (on Windows): one sentence, and the earlier file stays."""
    target = tmp_path / "out.gpkg"
    run("fittransects", {**keys, "PROFILES": str(target)})
    before = target.read_bytes()

    def held(source, place):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(destinations.os, "replace", held)
    said = refusal("fittransects", {**keys, "PROFILES": str(target), "TE_TO": 60})
    assert f"PROFILES cannot be written to {target}: Permission denied." in said
    assert target.read_bytes() == before
    assert [path.name for path in tmp_path.iterdir()] == ["out.gpkg"]


def test_leftovers_of_the_old_database_do_not_reach_the_new(keys, tmp_path):
    """A write-ahead log of the file before, left by a program that died, must not be read into the new one."""
    target = tmp_path / "out.gpkg"
    run("fittransects", {**keys, "PROFILES": str(target)})
    open_still = sqlite3.connect(target)
    open_still.execute("PRAGMA journal_mode=WAL")
    open_still.execute("PRAGMA wal_autocheckpoint=0")
    open_still.execute("CREATE TABLE of_the_old_file (a)")
    open_still.commit()
    assert os.path.getsize(f"{target}-wal") > 0
    run("fittransects", {**keys, "PROFILES": str(target), "TE_TO": 60})
    fresh = sqlite3.connect(target)
    assert fresh.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    tables = {name for (name,) in fresh.execute("SELECT name FROM sqlite_master")}
    assert "of_the_old_file" not in tables
    fresh.close()
    open_still.close()


def test_flatgeobuf_without_rows_is_a_layer(tmp_path):
    """A plate that is not loaded has no markers; the file says so rather than to be empty."""
    dem = equator_grid(tmp_path / "flat.tif", 20.0, lambda distance: 0.0 * distance - 5000.0)
    keys = {"TRANSECTS": lines_layer([equator_line(20.0)]), "DEM": dem, "STEP_KM": 3 * STEP_KM, "LOAD": 2}
    results = run("bendtransects", {**keys, "MARKERS": str(tmp_path / "markers.fgb")})
    layer = QgsVectorLayer(results["MARKERS"], "markers", "ogr")
    assert layer.isValid()
    assert layer.fields()[0].name() == "transect"
    assert layer.featureCount() == 0
