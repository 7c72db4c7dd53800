"""Observers from files: what is read, what is said, and what is refused, naming the row."""

import warnings

import geopandas
import numpy as np
import pytest
import shapely
from shapely.geometry import LineString, MultiPoint, Point, box

from viewshed.errors import DataError, InputError, ViewshedWarning
from viewshed.io.features import read_observers
from viewshed.places import Observer, Sector

PLACES = ((1000, 2000), (3000, 4000))


@pytest.fixture
def table(tmp_path):
    """Give a function that writes a table of text and returns its path."""

    def write(text, name="sites.csv", encoding="utf-8"):
        path = tmp_path / name
        path.write_bytes(text.encode(encoding))
        return path

    return write


@pytest.fixture
def vector(tmp_path):
    """Give a function that writes places and their columns as a vector file."""

    def write(file="sites.gpkg", /, *, places=PLACES, crs="EPSG:32633", **more):
        options = {k: more.pop(k) for k in ("driver", "layer") if k in more}
        shapes = [Point(p) if isinstance(p, tuple) else p for p in places]
        frame = geopandas.GeoDataFrame(more, geometry=shapes, crs=crs)
        path = tmp_path / file
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # files that lack something are meant to
            if path.suffix == ".parquet":
                frame.to_parquet(path)
            else:
                frame.to_file(path, **options)
        return path

    return write


# --- tables of text -----------------------------------------------------------------------------


def test_a_table_of_text(table):
    path = table(
        "name,x,y,eye_height,target_height,range,bearing_from,bearing_to\n"
        "North mast,500,7200,60,1.7,30km,350,10\n"
        "South mast,510,7100.5,6ft,,,,\n"
    )
    assert read_observers(path) == [
        Observer(
            *(500, 7200, 60, "North mast"),
            target_height=1.7,
            range_m=30_000,
            sector=Sector(350, 10),
        ),
        Observer(510, 7100.5, 6 * 0.3048, "South mast"),
    ]


def test_places_alone_are_enough_and_names_are_numbers(table):
    first, second = read_observers(table("x,y\n1,2\n3,4\n"))
    assert first == Observer(1, 2, name="observer 1")
    assert second == Observer(3, 4, name="observer 2")


def test_numbers_leave_out_names_that_are_taken(table):
    found = read_observers(table("x,y,name\n1,2,observer 2\n3,4,\n5,6,\n"))
    assert [observer.name for observer in found] == ["observer 2", "observer 3", "observer 4"]


def test_an_elevation_of_the_eye_stands_instead_of_its_height(table):
    high, usual = read_observers(table("x,y,eye_height,eye_elevation\n1,2,,1150ft\n3,4,2,\n"))
    assert (high.eye_height, high.eye_elevation) == (None, pytest.approx(350.52))
    assert (usual.eye_height, usual.eye_elevation) == (2.0, None)


@pytest.mark.parametrize(
    "header",
    ["x,y", "X,Y", " Easting , NORTHING ", "easting,northing"],
)
def test_x_and_y_are_those_of_the_elevation_grid_unless_told(table, header):
    path = table(f"{header}\n1,2\n")
    assert read_observers(path)[0].crs is None
    assert read_observers(path, crs="EPSG:32633")[0].crs == "EPSG:32633"


@pytest.mark.parametrize("header", ["lon,lat", "Longitude,Latitude", "LONG,LAT", "lng,lat"])
def test_lon_and_lat_are_degrees(table, header):
    path = table(f"{header}\n9.5,47.25\n")
    (found,) = read_observers(path)
    assert (found.x, found.y, found.crs) == (9.5, 47.25, "EPSG:4326")
    assert read_observers(path, crs="EPSG:4258")[0].crs == "EPSG:4258"


def test_lon_and_lat_are_no_metres_whatever_crs_is_given(table):
    path = table("lon,lat\n9.5,47.25\n")
    with pytest.warns(ViewshedWarning, match="lon,lat are degrees .* not as EPSG:32633"):
        (found,) = read_observers(path, crs="EPSG:32633")
    assert found.crs == "EPSG:4326"


@pytest.mark.parametrize(
    ("separator", "name"), [(",", "s.csv"), (";", "s.CSV"), ("\t", "s.tsv"), (";", "s.txt")]
)
@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
def test_separators_and_line_endings(table, separator, name, ending):
    lines = ["name|x|y|range", '"Hill, upper; left"|1|2|5km', ""]
    path = table(ending.join(lines).replace("|", separator), name)
    assert read_observers(path) == [Observer(1, 2, name="Hill, upper; left", range_m=5000)]


@pytest.mark.parametrize("ending", ["\n", "\r\n"])
def test_a_first_line_that_names_the_separator_is_no_header(table, ending):
    path = table(ending.join(["sep=;", "x;y", "1;2", "3;far"]))
    with pytest.raises(DataError, match="line 4, y: 'far'"):
        read_observers(path)


def test_every_cell_may_stand_in_quotes(table):
    assert read_observers(table('"x","y","name"\n"1","2","A ""b"", c"\n'))[0].name == 'A "b", c'


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16"])
def test_encodings(table, encoding):
    path = table("name,x,y\nŒuvre Höhe 東,1,2\n", encoding=encoding)
    assert read_observers(path)[0].name == "Œuvre Höhe 東"


def test_western_letters_are_read_and_said(table):
    path = table("name,x,y\nlow,0,0\nHöhe € süd,1,2\n", encoding="cp1252")
    with pytest.warns(ViewshedWarning, match=r"is not UTF-8 \(line 3\)"):
        assert read_observers(path)[1].name == "Höhe € süd"


def test_bytes_that_are_no_letters_are_refused(tmp_path):
    path = tmp_path / "sites.csv"
    path.write_bytes(b"name,x,y\nH\x81he,1,2\n")
    with pytest.raises(DataError, match="line 2 holds bytes that are no letters"):
        read_observers(path)
    path.write_bytes(b"PK\x03\x04\0\0")
    with pytest.raises(DataError, match="is not a table of text"):
        read_observers(path)


def test_decimal_commas_are_read_and_said(table):
    path = table("name;x;y;range;eye_height\nA,1;500123,5;7200000;1,5km;2\n")
    with pytest.warns(ViewshedWarning, match="decimal commas, first '500123,5' in line 2"):
        (found,) = read_observers(path)
    assert (found.name, found.x, found.range_m) == ("A,1", 500123.5, 1500.0)


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("x;y\n1,5;2\n3.5;4\n", r"a comma \('1,5' in line 2\) and a point \('3.5' in line 3\)"),
        ("x;y\n1,500,000;2\n", "line 2, x: '1,500,000' is not a number"),
        ("x,y\n1,5,2\n", "line 2 has 3 cells for 2 columns; .* semicolons"),
    ],
)
def test_commas_that_can_mean_two_things_are_refused(table, text, match):
    with pytest.raises(DataError, match=match):
        read_observers(table(text))


def test_blank_lines_and_cells_left_out_at_the_end(table):
    path = table("\nx,y,name,range\n\n1,2\n , ,,\n3,4,B,,,\n")
    assert [(o.x, o.name) for o in read_observers(path)] == [(1.0, "observer 1"), (3.0, "B")]


def test_a_unit_may_stand_in_the_name_of_a_column(table):
    path = table(
        "x,y,range_km,Eye height [ft],target-height (us-ft)\n1,2,30,6,3937\n" "3,4,500m,2m,\n"
    )
    first, second = read_observers(path)
    assert (first.range_m, first.eye_height) == (30_000.0, pytest.approx(1.8288))
    assert first.target_height == pytest.approx(1200.0)
    assert (second.range_m, second.eye_height) == (500.0, 2.0)


@pytest.mark.parametrize("name", ["eye_elevat", "eye_elevati", "EYE_ELEVATION", "eyeElevation"])
def test_names_of_columns_may_be_cut_or_run_together(table, name):
    assert read_observers(table(f"x,y,{name}\n1,2,30\n"))[0].eye_elevation == 30.0


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "is empty"),
        ("\n \n", "is empty; write a line of column names"),
        ("x,y\n", "holds no points"),
        ("1,2\n3,4\n", "no line of column names"),
        ("east,north\n1,2\n", "no columns x,y or lon,lat among 'east,north'"),
        ("x y\n1 2\n", "no columns x,y or lon,lat among 'x y'"),
        ("x,lat\n1,2\n", "no columns x,y or lon,lat"),
        ("x,y,lon,lat\n1,2,3,4\n", "has columns x,y and lon,lat; keep one pair"),
        ("x,y,Easting\n1,2,3\n", "columns 'x' and 'Easting' both give the x"),
        ("x,y,range,range_km\n1,2,3,4\n", "columns 'range' and 'range_km' both give the range"),
        ('x,y,name\n1,2,"A\n3,4,B\n', "line 2 cannot be taken apart"),
    ],
)
def test_texts_that_are_no_table_of_points_are_refused(table, text, match):
    with pytest.raises(DataError, match=match):
        read_observers(table(text))


@pytest.mark.parametrize(
    ("line", "match"),
    [
        ("1,,A,,,,,", "line 3, y: is empty; give both coordinates"),
        ("1,here,A,,,,,", "line 3, y: 'here' is not a number"),
        ("1,nan,A,,,,,", "line 3, y: 'nan' is not a number"),
        ("1e999,1,A,,,,,", "line 3, x: '1e999' is not a number"),
        ("1,2,A,tall,,,,", "line 3, eye_height: length 'tall' is not a number"),
        ("1,2,A,5 furlong,,,,", "line 3, eye_height: length '5 furlong'"),
        ("1,2,A,-1,,,,", "line 3, eye_height: eye height -1 m is below ground"),
        ("1,2,A,2,300,,,", "line 3 has eye_height and eye_elevation; leave one empty"),
        ("1,2,A,,,-2,,", "line 3, target_height: target height -2 m is below ground"),
        ("1,2,A,,,,0,", "line 3, range: range 0 m: give a length above 0"),
        ("1,2,A,,,,30000km,", "line 3, range: range 3e[+]07 m"),
    ],
)
def test_bad_cells_are_refused_naming_line_and_column(table, line, match):
    header = "x,y,name,eye_height,eye_elevation,target_height,range,rest"
    with pytest.raises(DataError, match=match):
        read_observers(table(f"{header}\n0,0,first,,,,,\n{line}\n"))


def test_lines_are_counted_as_in_an_editor(table):
    path = table('x,y,name\n1,2,"two\nlines"\n\n3,x,B\n')
    with pytest.raises(DataError, match="line 5, y: 'x'"):
        read_observers(path)


@pytest.mark.parametrize(
    ("cells", "match"),
    [
        ("350,", "line 2 has only bearing_from of the two bearings"),
        (",10", "line 2 has only bearing_to of the two bearings"),
        ("north,10", "line 2, bearing_from: 'north' is not a bearing"),
        ("10,10", "line 2: sector 10,10 has no width"),
        ("0,400", "line 2: sector bearing 400 is outside -360 to 360"),
    ],
)
def test_unusable_bearings_are_refused(table, cells, match):
    with pytest.raises(DataError, match=match):
        read_observers(table(f"x,y,bearing_from,bearing_to\n1,2,{cells}\n"))


def test_bearings_may_say_that_they_are_degrees(table):
    path = table("x,y,bearing_from,bearing_to\n1,2,\u221210°,90 deg\n")
    assert read_observers(path)[0].sector == Sector(-10, 90)


@pytest.mark.parametrize(
    ("place", "match"),
    [
        ("-33.9,151.2", "line 3: there is no latitude 151.2; .* swapped"),
        ("500000,7200000", "line 3: there is no latitude 7.2e[+]06; state the CRS"),
        ("400,10", "line 3: there is no longitude 400"),
    ],
)
def test_longitudes_and_latitudes_that_there_are_none_of(table, place, match):
    with pytest.raises(DataError, match=match):
        read_observers(table(f"lon,lat\n1,2\n{place}\n"))
    with pytest.raises(DataError, match=match):
        read_observers(table(f"x,y\n1,2\n{place}\n"), crs="EPSG:4326")


# --- what is said, and the rules for all files --------------------------------------------------


def test_columns_not_used_are_noted_once(table):
    path = table("x,y,height,empty,kind\n1,2,30,,mast\n3,4,40,,mast\n")
    with pytest.warns(ViewshedWarning, match="columns not used: height, kind; .* eye_height") as w:
        read_observers(path)
    assert len(w) == 1


def test_repeated_observers_count_once(table):
    path = table("x,y,name,eye_height\n1,2,A,1.7\n3,4,B,\n1,2.0,A,\n")
    with pytest.warns(ViewshedWarning, match="line 4 repeats line 2; each counts once"):
        found = read_observers(path)
    assert [observer.name for observer in found] == ["A", "B"]


def test_one_place_with_two_names_or_values_is_two_observers(table):
    path = table("x,y,name,eye_height\n1,2,roof,20\n1,2,door,20\n1,2,cellar,0\n")
    assert len(read_observers(path)) == 3


def test_one_name_for_two_is_refused(table):
    with pytest.raises(DataError, match="line 2 and line 4 have the same name 'A b'"):
        read_observers(table("x,y,name\n1,2,A b\n3,4,B\n5,6, A  b \n"))


def test_more_observers_than_can_be_counted_are_refused(table):
    lines = "".join(f"{i},0\n" for i in range(65_535))
    with pytest.raises(DataError, match="holds 65535 points; give at most 65534"):
        read_observers(table(f"x,y\n{lines}"))


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(DataError, match=r"sites.csv: no such file"):
        read_observers(tmp_path / "sites.csv")


def test_a_crs_that_is_none(table):
    with pytest.raises(InputError, match="'EPSG:nowhere' is not a coordinate reference system"):
        read_observers(table("x,y\n1,2\n"), crs="EPSG:nowhere")


def test_a_table_of_text_has_no_layers(table):
    with pytest.raises(DataError, match="has no layers; leave out 'sites'"):
        read_observers(f"{table('x,y')}:sites")


# --- vector files -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "driver"),
    [
        ("sites.gpkg", "GPKG"),
        ("sites.fgb", "FlatGeobuf"),
        ("sites.shp", "ESRI Shapefile"),
        ("sites.parquet", None),
        ("sites with ä space.geojson", "GeoJSON"),
    ],
)
def test_vector_formats(vector, name, driver):
    path = vector(
        name,
        driver=driver,
        layer=None,
        name=["Höhe", None],
        eye_elevat=[350.5, np.nan],
        target_height=["6ft", ""],
        bearing_from=[350, -10],
        bearing_to=[10.5, 90],
    )
    first, second = sorted(read_observers(path), key=lambda observer: observer.x)
    assert (first.x, first.y, first.crs) == (1000.0, 2000.0, "EPSG:32633")
    assert (first.name, first.eye_elevation, first.sector) == ("Höhe", 350.5, Sector(350, 10.5))
    assert first.target_height == pytest.approx(1.8288)
    assert (second.eye_height, second.target_height, second.sector) == (1.7, None, Sector(-10, 90))
    assert second.name.startswith("observer ")


def test_kml(tmp_path):
    path = tmp_path / "sites.kml"
    path.write_text(
        '<?xml version="1.0"?><kml xmlns="http://www.opengis.net/kml/2.2"><Document><Placemark>'
        "<name>Lookout</name><Point><coordinates>9.5,47.25,0</coordinates></Point>"
        "</Placemark></Document></kml>"
    )
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", ".*columns not used", ViewshedWarning)
        (found,) = read_observers(path)
    assert (found.name, found.x, found.y) == ("Lookout", 9.5, 47.25)
    assert found.crs == "EPSG:4326"


def test_numbers_as_names_are_whole(vector):
    assert [o.name for o in read_observers(vector(name=[7.0, np.nan]))] == ["7", "observer 2"]


def test_a_custom_crs_is_told_in_full(vector):
    crs = "+proj=tmerc +lat_0=0 +lon_0=9.3 +k=1 +x_0=5000 +y_0=0 +ellps=bessel +units=m"
    text = read_observers(vector(crs=crs))[0].crs
    assert text.startswith("PROJCRS[")


def test_a_file_without_crs_needs_one(vector):
    path = vector("sites.shp", crs=None)
    with pytest.raises(DataError, match=r"no coordinate reference system; .* --observer-crs"):
        read_observers(path)
    assert read_observers(path, crs="EPSG:32633")[0].crs == "EPSG:32633"


def test_the_crs_of_a_file_counts(vector):
    with pytest.warns(ViewshedWarning, match=r"UTM zone 33N, which counts here; EPSG:4326 was not"):
        found = read_observers(vector(), crs="EPSG:4326")
    assert found[0].crs == "EPSG:32633"
    read_observers(vector(), crs="EPSG:32633")  # nothing to say


def test_points_with_heights(vector):
    with pytest.warns(ViewshedWarning, match="z coordinates of its points are not used"):
        found = read_observers(vector(places=[(1, 2, 30), (3, 4, 0)]))
    assert found[0].eye_height == 1.7


@pytest.mark.parametrize(
    ("shape", "match"),
    [
        (box(0, 0, 9, 9), "feature 2 is a Polygon, and observers are points; .* centroid"),
        (LineString([(0, 0), (9, 9)]), "feature 2 is a LineString"),
        (MultiPoint([(0, 0), (9, 9)]), "feature 2 is 2 points in one; split it"),
        (None, "feature 2 has no place"),
        (Point(), "feature 2 has no place"),
    ],
)
def test_shapes_that_are_no_point_are_refused(vector, shape, match):
    with pytest.raises(DataError, match=match):
        read_observers(vector(places=[(1, 2), shape]))


def test_a_multipoint_of_one_is_a_point(vector):
    found = read_observers(vector(places=[MultiPoint([(5, 6)]), MultiPoint([(7, 8)])]))
    assert [(o.x, o.y) for o in found] == [(5.0, 6.0), (7.0, 8.0)]


def test_coordinates_that_are_no_numbers_are_refused(vector):
    with pytest.raises(DataError, match="feature 2 has no finite coordinates"):
        read_observers(vector(places=[(1, 2), (float("inf"), 4)]))


def test_swapped_degrees_in_a_vector_file(vector):
    with pytest.raises(DataError, match=r"feature 2: there is no latitude 151.2; .* swapped"):
        read_observers(vector(places=[(1, 2), (-33.9, 151.2)], crs="EPSG:4326"))


def test_bad_values_name_feature_and_column(vector):
    with pytest.raises(DataError, match="feature 2, range: length 'far' is not a number"):
        read_observers(vector(range=["5km", "far"]))


def test_a_layer_is_named_after_a_colon(vector):
    vector(layer="masts")
    path = vector(layer="lookouts", places=[(5, 6)])
    assert len(read_observers(f"{path}:masts")) == 2
    assert len(read_observers(f"{path}:lookouts")) == 1
    with pytest.raises(DataError, match=r"several layers of points \(masts, lookouts\); name one"):
        read_observers(path)
    with pytest.raises(DataError, match="has no layer 'woods'; it has masts, lookouts"):
        read_observers(f"{path}:woods")


def test_the_one_layer_of_points_is_taken(vector):
    vector(layer="woods", places=[box(0, 0, 9, 9)])
    path = vector(layer="lookouts", places=[(5, 6)])
    assert read_observers(path)[0].x == 5.0


def test_layers_without_points_are_named(vector):
    vector(layer="woods", places=[box(0, 0, 9, 9)])
    path = vector(layer="roads", places=[LineString([(0, 0), (9, 9)])])
    with pytest.raises(DataError, match=r"no layer of points alone \(woods, roads\)"):
        read_observers(path)


def test_no_points_at_all(vector):
    with pytest.raises(DataError, match="holds no points"):
        read_observers(vector("sites.geojson", places=[]))


def test_columns_without_places(tmp_path):
    path = tmp_path / "sites.dbf"
    geopandas.GeoDataFrame({"name": ["A"]}, geometry=[Point(1, 2)], crs=32633).to_file(
        path.with_suffix(".shp")
    )
    path.with_suffix(".shp").unlink()
    with pytest.raises(DataError, match="has no geometry; save it as CSV"):
        read_observers(path)


def test_more_features_than_can_be_counted_are_refused(vector):
    places = list(shapely.points(np.arange(65_535.0), 0.0))
    with pytest.raises(DataError, match="holds 65535 points; give at most 65534"):
        read_observers(vector("sites.fgb", places=places))


@pytest.mark.parametrize("name", ["sites.gpkg", "sites.parquet", "sites.xyz"])
def test_files_that_are_something_else(tmp_path, name):
    path = tmp_path / name
    path.write_bytes(b"nothing of the kind")
    with pytest.raises(DataError, match=f"{name}: cannot be read as a vector file"):
        read_observers(path)
    path.write_bytes(b"")
    with pytest.raises(DataError, match=f"{name}: is empty"):
        read_observers(path)
