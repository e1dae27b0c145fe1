"""Files: the five formats give the same shapes, and each bad file one sentence."""

from __future__ import annotations

import json
import subprocess
import sys
import warnings
import zipfile
from pathlib import Path

import numpy as np
import pytest
import shapely

from geo.errors import GeometryError
from geo.layers import list_layers, point_coordinates, read_layer
from geo.outline import boundary_of_area

BOXES = [
    shapely.box(0, 0, 2, 1),
    shapely.box(3, 0, 4, 1),
    shapely.box(5, 5, 6, 6).difference(shapely.box(5.2, 5.2, 5.4, 5.4)),
]


def write(path: Path, shapes=BOXES, crs="EPSG:4326", **options) -> Path:
    """Written by somebody else: geopandas."""
    import geopandas

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        frame = geopandas.GeoDataFrame({"Ward": [f"w{i}" for i in range(len(shapes))], "number": range(len(shapes))}, geometry=list(shapes), crs=crs)  # fmt: skip
        if path.suffix == ".parquet":
            frame.to_parquet(path, **options)
        else:
            frame.to_file(path, **options)
    return path


def refusal(path: Path | str, **options) -> tuple[str, str]:
    with pytest.raises(GeometryError) as caught:
        read_layer(path, **options)
    return caught.value.sentence, caught.value.remedy


@pytest.mark.parametrize("name", ["a.gpkg", "a.shp", "a.geojson", "a.fgb", "a.parquet"])
@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:27700"])
def test_every_format_gives_the_same_shapes(tmp_path, name, crs) -> None:
    if name == "a.geojson" and crs != "EPSG:4326":
        pytest.skip("GeoJSON is in longitude and latitude")
    layer = read_layer(write(tmp_path / name, crs=crs), columns=["Ward"])
    order = np.argsort(layer.columns["Ward"])  # FlatGeobuf sorts by place
    assert list(layer.columns["Ward"][order]) == ["w0", "w1", "w2"]
    for found, meant in zip(layer.shapes[order], BOXES):
        assert shapely.equals(found, meant)
    assert layer.crs is not None
    assert layer.crs.equals(crs, ignore_axis_order=True) or layer.crs.to_epsg() == int(crs[5:])
    (info,) = list_layers(tmp_path / name)
    assert (info.rows, info.columns) == (3, ("Ward", "number"))


def test_a_third_dimension_is_left_off(tmp_path) -> None:
    solid = [shapely.force_3d(shape, 7.0) for shape in BOXES]
    layer = read_layer(write(tmp_path / "a.geojson", solid))
    assert not shapely.has_z(layer.shapes).any()
    assert len(layer.crs.axis_info) == 2


def test_a_zip_with_one_shapefile_is_read(tmp_path) -> None:
    write(tmp_path / "a.shp")
    with zipfile.ZipFile(tmp_path / "a.zip", "w") as packed:
        for part in tmp_path.glob("a.*"):
            if part.suffix != ".zip":
                packed.write(part, f"inner folder/{part.name}")
    layer = read_layer(tmp_path / "a.zip")
    assert len(layer.shapes) == 3
    assert layer.source.name == "a.zip, inner folder/a.shp"


def test_spherical_edges_of_geoparquet_are_heeded(tmp_path) -> None:
    import pyarrow.parquet as pq

    table = pq.read_table(write(tmp_path / "a.parquet"))
    about = json.loads(table.schema.metadata[b"geo"])
    about["columns"]["geometry"]["edges"] = "spherical"
    del about["columns"]["geometry"]["crs"]  # says nothing: longitude and latitude
    pq.write_table(
        table.replace_schema_metadata({b"geo": json.dumps(about).encode()}), tmp_path / "b.parquet"
    )
    layer = read_layer(tmp_path / "b.parquet")
    assert layer.edges == "geodesic"
    assert layer.crs.to_authority() == ("OGC", "CRS84")
    about["columns"]["geometry"]["crs"] = None
    about["columns"]["geometry"]["edges"] = "planar"
    pq.write_table(
        table.replace_schema_metadata({b"geo": json.dumps(about).encode()}), tmp_path / "c.parquet"
    )
    layer = read_layer(tmp_path / "c.parquet")
    assert (layer.edges, layer.crs) == ("straight", None)


def test_points_become_coordinates(tmp_path) -> None:
    places = [shapely.Point(1, 2), None, shapely.Point(3, 4)]
    x, y = point_coordinates(read_layer(write(tmp_path / "a.gpkg", places)))
    np.testing.assert_array_equal(x, [1, np.nan, 3])
    np.testing.assert_array_equal(y, [2, np.nan, 4])
    with pytest.raises(GeometryError) as caught:
        point_coordinates(read_layer(write(tmp_path / "b.gpkg")))
    assert caught.value.sentence == "b.gpkg: row 1 is a Polygon, not a point; so are 2 other rows."


def test_a_file_without_a_crs_says_none(tmp_path) -> None:
    write(tmp_path / "a.shp", crs=None)
    assert read_layer(tmp_path / "a.shp").crs is None
    (tmp_path / "a.prj").write_text("not a projection")
    assert read_layer(tmp_path / "a.shp").crs is None


@pytest.mark.parametrize(
    "address",
    ["https://example.org/a.gpkg", "/vsicurl/https://example.org/a.gpkg", "zip://a.zip!a.shp", "PG://here"],
)
def test_addresses_are_never_opened(address) -> None:
    assert refusal(address) == (
        f"{address}: is an address, not a file on this machine.",
        "Name a local file.",
    )


def test_a_missing_file_a_folder_and_an_empty_file(tmp_path) -> None:
    assert refusal(tmp_path / "b.gpkg")[0].endswith("b.gpkg: there is no such file.")
    write(tmp_path / "a.gpkg")
    assert refusal(tmp_path) == (
        f"{tmp_path.name}: is a folder, not a file.", "Name one file inside it: a.gpkg."
    )  # fmt: skip
    (tmp_path / "c.fgb").write_bytes(b"")
    assert refusal(tmp_path / "c.fgb")[0] == "c.fgb: the file is empty."
    (tmp_path / "d.kml").write_text("<kml/>")
    assert refusal(tmp_path / "d.kml")[0] == "d.kml: its ending names no kind of layer that is read."


def test_a_shapefile_without_its_index(tmp_path) -> None:
    write(tmp_path / "a.shp")
    (tmp_path / "a.shx").unlink()
    assert refusal(tmp_path / "a.shp") == (
        "a.shp: the file a.shx that belongs to it is missing.", "Copy all files of the Shapefile."
    )  # fmt: skip


@pytest.mark.parametrize("name", ["a.gpkg", "a.fgb", "a.parquet", "a.geojson"])
@pytest.mark.parametrize("share", [0.3, 0.9])
def test_a_truncated_file(tmp_path, name, share) -> None:
    path = write(tmp_path / name, [shapely.box(i, 0, i + 1, 1) for i in range(300)])
    whole = path.read_bytes()
    path.write_bytes(whole[: int(share * len(whole))])
    kind = {"gpkg": "GeoPackage", "fgb": "FlatGeobuf", "parquet": "GeoParquet", "geojson": "GeoJSON"}[
        name[2:]
    ]
    assert refusal(path) == (
        f"{name}: it could not be read as {kind}; the file is damaged or incomplete.", "Fetch or write it again."
    )  # fmt: skip


def test_a_truncated_shapefile_never_passes_for_whole(tmp_path) -> None:
    """The library itself says nothing: missing shapes are refused by the boundary."""
    path = write(tmp_path / "a.shp", [shapely.box(i, 0, i + 1, 1) for i in range(300)])
    path.write_bytes(path.read_bytes()[:20_000])
    with pytest.raises(GeometryError):
        boundary_of_area(read_layer(path).shapes, crs="EPSG:4326")


def test_several_layers_must_be_chosen_from(tmp_path) -> None:
    write(tmp_path / "a.gpkg", layer="zone")
    write(tmp_path / "a.gpkg", layer="district")
    assert refusal(tmp_path / "a.gpkg") == (
        "a.gpkg: it has 2 layers: zone, district.", "Name the one that is meant."
    )  # fmt: skip
    assert len(read_layer(tmp_path / "a.gpkg", layer="district").shapes) == 3
    assert refusal(tmp_path / "a.gpkg", layer="zones") == (
        "a.gpkg: it has no layer 'zones'.", "Its layers are zone, district."
    )  # fmt: skip


def test_a_column_that_is_not_there(tmp_path) -> None:
    for name in ("a.gpkg", "a.parquet"):
        assert refusal(write(tmp_path / name), columns=["ward"]) == (
            f"{name}: it has no column 'ward'.", "Its columns are Ward, number."
        )  # fmt: skip


def test_tables_without_shapes(tmp_path) -> None:
    import pandas
    import pyogrio

    table = pandas.DataFrame({"a": [1, 2]})
    table.to_parquet(tmp_path / "a.parquet")
    assert (
        refusal(tmp_path / "a.parquet")[0]
        == "a.parquet: it is a Parquet table that says nothing about shapes."
    )
    pyogrio.write_dataframe(table, tmp_path / "a.gpkg")
    assert refusal(tmp_path / "a.gpkg")[0] == "a.gpkg: it holds a table without shapes."


def test_a_broken_ring_names_its_row(tmp_path) -> None:
    def feature(ring: list[list[float]]) -> dict[str, object]:
        return {"type": "Feature", "properties": {}, "geometry": {"type": "Polygon", "coordinates": [ring]}}

    good = [[0, 0], [1, 0], [1, 1], [0, 0]]
    (tmp_path / "a.geojson").write_text(
        json.dumps({"type": "FeatureCollection", "features": [feature(good), feature(good[:3])]})
    )
    assert refusal(tmp_path / "a.geojson")[0] == (
        "a.geojson: the shape of row 2 is broken, such as a ring that does not close; 1 shape in all."
    )


@pytest.mark.parametrize(
    "text",
    [
        '{"type": "Polygon", "coordinates": ' + "[" * 100_000,
        '{"type": "FeatureCollection", "features": [',
    ],
)
def test_hostile_geojson_is_only_a_damaged_file(tmp_path, text) -> None:
    (tmp_path / "a.geojson").write_text(text)
    assert refusal(tmp_path / "a.geojson")[0] == (
        "a.geojson: it could not be read as GeoJSON; the file is damaged or incomplete."
    )


def test_a_coordinate_beyond_all_numbers_never_becomes_a_boundary(tmp_path) -> None:
    (tmp_path / "a.geojson").write_text(
        '{"type": "Polygon", "coordinates": [[[1e400, 0], [1, 0], [1, 1], [1e400, 0]]]}'
    )
    with pytest.raises(GeometryError) as caught:
        boundary_of_area(read_layer(tmp_path / "a.geojson").shapes, crs="EPSG:4326")
    assert caught.value.sentence == "The area: shape 1 has a coordinate that is not a finite number."


VRT = '<OGRVRTDataSource><OGRVRTLayer name="a"><SrcDataSource>{}</SrcDataSource></OGRVRTLayer></OGRVRTDataSource>'


def test_a_file_that_names_other_files_is_refused_under_any_name(tmp_path) -> None:
    secret = write(tmp_path / "secret.gpkg")
    for name in ("a.geojson", "a.gpkg", "a.fgb", "a.shp", "a.parquet", "a.json"):
        (tmp_path / name).write_text(VRT.format(secret))
        assert refusal(tmp_path / name)[0].endswith("but what stands in it is something else.")
    recipe = {"type": "gdal_streamed_alg", "command_line": f"gdal vector pipeline ! read {secret}"}
    (tmp_path / "b.json").write_text(json.dumps(recipe))
    assert refusal(tmp_path / "b.json")[0].endswith("but what stands in it is something else.")


def test_only_the_named_drivers_are_loaded(repository) -> None:
    """In a fresh interpreter: the library is not yet there, so the list is in force; and nothing is said on the way."""
    code = (
        "from geo.layers import _reader; r = _reader(); print(sorted(r.list_drivers())); "
        "import os; print(os.environ.get('GDAL_SKIP'), os.environ.get('CPL_LOG'))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=repository, capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines() == [
        "['ESRI Shapefile', 'FlatGeobuf', 'GPKG', 'GeoJSON', 'MEM']",
        "None None",
    ]
    assert done.stderr == ""


def test_zips_are_held_to_limits(tmp_path) -> None:
    with zipfile.ZipFile(tmp_path / "bomb.zip", "w", zipfile.ZIP_DEFLATED) as packed:
        packed.writestr("a.geojson", b"{" + b" " * 60_000_000)
    sentence, remedy = refusal(tmp_path / "bomb.zip")
    assert sentence.startswith("bomb.zip: unpacked it would hold 60 MB, 1,0")
    assert remedy == "Unpack it yourself if you trust it, and name the file inside."
    with zipfile.ZipFile(tmp_path / "two.zip", "w") as packed:
        packed.writestr("a.geojson", "{}")
        packed.writestr("b.geojson", "{}")
    assert (
        refusal(tmp_path / "two.zip")[0]
        == "two.zip: it should hold one layer file, but holds a.geojson, b.geojson."
    )
    with zipfile.ZipFile(tmp_path / "none.zip", "w") as packed:
        packed.writestr("../../a.txt", "x")
    assert refusal(tmp_path / "none.zip")[0] == "none.zip: it should hold one layer file, but holds none."
    with zipfile.ZipFile(tmp_path / "vrt.zip", "w") as packed:
        packed.writestr("a.geojson", VRT)
    assert refusal(tmp_path / "vrt.zip")[0].endswith("but what stands in it is something else.")
    (tmp_path / "cut.zip").write_bytes((tmp_path / "bomb.zip").read_bytes()[:2000])
    assert refusal(tmp_path / "cut.zip")[0] == "cut.zip: the zip is damaged or incomplete."
    (tmp_path / "not.zip").write_bytes(b"hello")
    assert refusal(tmp_path / "not.zip")[0].endswith("but what stands in it is something else.")


def test_names_are_shown_without_control_characters(tmp_path) -> None:
    (tmp_path / "a\x1b[31m.fgb").write_bytes(b"")
    assert refusal(tmp_path / "a\x1b[31m.fgb")[0] == "a�[31m.fgb: the file is empty."
