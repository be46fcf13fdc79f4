"""Tables in, Parquet and its description out, on tables of each kind and on the real groups of run32."""

import csv
import subprocess
import sys
from pathlib import Path

import duckdb
import numpy as np
import pytest
from astropy import units
from astropy.table import MaskedColumn, Table

from tilemap.buildfile import Catalogue
from tilemap.catalogue.ingest import ingest
from tilemap.errors import InputError

RUN32 = Path(__file__).parents[1] / "data" / "run32"
GROUPS = Catalogue(
    file="groups.csv",
    position=["x_Mpc", "y_Mpc", "z_Mpc"],
    unit="Mpc",
    id="group",
    size="rms_radius_Mpc",
    rank="dark_mass_Msun",
)
ABC = Catalogue(file="objects.ecsv", position=["x", "y", "z"], rank="mass", id="name")


def view_of(width=10.0, along="z", **changes):
    sides = {"u": [0.0, width], "v": [0.0, width], "depth": [0.0, width], "unit": "Mpc", "box": [width] * 3}
    return {"along": along, "periodic": True, **sides, **changes}


def table(**columns):
    made = Table({"x": [1.0, 2.0, 3.0], "y": [4.0, 5.0, 6.0], "z": [7.0, 8.0, 9.0], "mass": [10.0, 30.0, 20.0]})
    made["name"] = ["a", "b", "c"]
    for name in ("x", "y", "z"):
        made[name].unit = units.Mpc
    for name, values in columns.items():
        made[name] = values
    return made


def ingested(tmp_path, made=None, section=ABC, view=None):
    """The entry, and the rows of the file as dictionaries."""
    if made is not None:
        made.write(tmp_path / section.file, overwrite=True)
    entry = ingest(section, tmp_path, view or view_of(), tmp_path / "atlas")
    found = duckdb.execute("SELECT * FROM read_parquet(?)", [str(tmp_path / "atlas" / entry["file"])])
    names = [column[0] for column in found.description]
    return entry, [dict(zip(names, row, strict=True)) for row in found.fetchall()]


def test_all_63_groups_of_run32_arrive_with_their_numbers(tmp_path):
    entry = ingest(GROUPS, RUN32, view_of(), tmp_path)
    rows = duckdb.execute(
        'SELECT "group", tilemap_u, tilemap_v, tilemap_depth, dark_mass_Msun, tilemap_size FROM read_parquet(?) ORDER BY 1',
        [str(tmp_path / entry["file"])],
    ).fetchall()
    with (RUN32 / "groups.csv").open() as file:  # read again by the standard library
        expected = [
            tuple(float(line[key]) for key in ("group", "x_Mpc", "y_Mpc", "z_Mpc", "dark_mass_Msun", "rms_radius_Mpc"))
            for line in csv.DictReader(file)
        ]
    assert entry["count"] == 63
    assert np.allclose(rows, expected, rtol=1e-12)


def test_the_entry_describes_every_column(tmp_path):
    entry = ingest(GROUPS, RUN32, view_of(), tmp_path)
    described = {column["name"]: column for column in entry["columns"]}
    with (RUN32 / "groups.csv").open() as file:
        members = [int(line["members"]) for line in csv.DictReader(file)]
    assert described["members"] == {
        "name": "members",
        "unit": "",
        "type": "number",
        "min": min(members),
        "max": max(members),
    }


@pytest.mark.parametrize(("along", "expected"), [("z", (1, 4, 7)), ("x", (4, 7, 1)), ("y", (7, 1, 4))])
def test_the_image_axes_follow_the_line_of_sight(tmp_path, along, expected):
    _, rows = ingested(tmp_path, table(), view=view_of(along=along))
    first = next(row for row in rows if row["name"] == "a")
    assert (first["tilemap_u"], first["tilemap_v"], first["tilemap_depth"]) == expected


# Seen toward (3, 4, 0) with z up.
TURNED = {"along": None, "vectors": [[-0.8, 0.6, 0.0], [0.0, 0.0, 1.0], [0.6, 0.8, 0.0]]}


def test_seen_from_elsewhere_objects_are_turned_with_the_camera(tmp_path):
    view = view_of(**TURNED | {"periodic": False, "u": [0.0, 2.0], "v": [0.0, 10.0], "depth": [0.0, 10.0]})
    entry, rows = ingested(tmp_path, table(), view=view)
    # (1, 4, 7), (2, 5, 8), (3, 6, 9): u = -0.8 x + 0.6 y, v = z, depth = 0.6 x + 0.8 y
    found = {row["name"]: (row["tilemap_u"], row["tilemap_v"], row["tilemap_depth"]) for row in rows}
    assert found == {
        "a": pytest.approx((1.6, 7, 3.8)),
        "b": pytest.approx((1.4, 8, 5.2)),
        "c": pytest.approx((1.2, 9, 6.6)),
    }
    assert entry["outside"] == 0


def test_seen_from_elsewhere_an_object_stands_once_at_its_image_nearest_the_middle_of_the_view(tmp_path):
    view = view_of(**TURNED | {"u": [-8.0, 12.0], "v": [0.0, 20.0], "depth": [0.0, 20.0]})
    entry, rows = ingested(tmp_path, table(), view=view)
    assert (entry["count"], entry["outside"]) == (3, 0)
    middle = np.array([2.0, 10.0, 10.0])
    moves = np.stack(np.meshgrid(*[np.arange(-3, 4) * 10.0] * 3), axis=-1).reshape(-1, 3)
    for row in rows:
        place = np.array([row["x"], row["y"], row["z"]])
        images = (place + moves) @ np.array(TURNED["vectors"]).T
        nearest = images[np.argmin(((images - middle) ** 2).sum(axis=1))]
        assert (row["tilemap_u"], row["tilemap_v"], row["tilemap_depth"]) == pytest.approx(tuple(nearest))


def test_seen_from_elsewhere_an_object_whose_nearest_image_is_out_of_view_stands_at_one_that_is_not(tmp_path):
    # The view is a thin sheet far across: (1, 4, 7) is nearest its middle at a depth that is not shown.
    view = view_of(**TURNED | {"u": [-40.0, 40.0], "v": [0.0, 10.0], "depth": [9.7, 9.9]})
    _, rows = ingested(tmp_path, table(), view=view)
    # One period along (-1, 2) changes depth by 10 (-0.6 + 1.6) = 10, u by 10 (0.8 + 1.2) = 20; (3, -1) by 10 and -30: of
    # depths 3.8 + 6 i + 8 j = 9.8 the smallest steps are i = 1, j = 0, which is u = 1.6 - 8.
    assert [(row["tilemap_u"], row["tilemap_depth"]) for row in rows if row["name"] == "a"] == [
        pytest.approx((-6.4, 9.8))
    ]


def test_seen_from_elsewhere_positions_need_three_columns(tmp_path):
    section = Catalogue(file="objects.ecsv", position=["x", "y"], rank="mass")
    with pytest.raises(InputError, match="position needs 3 column names, found 2"):
        ingested(tmp_path, table(), section, view_of(**TURNED))


def test_positions_are_wrapped_into_a_view_across_the_box_edge(tmp_path):
    _, rows = ingested(tmp_path, table(), view=view_of(u=[2.5, 12.5]))
    assert sorted(row["tilemap_u"] for row in rows) == [3.0, 11.0, 12.0]


def test_an_object_a_hair_below_the_box_edge_is_not_lost(tmp_path):
    entry, _ = ingested(tmp_path, table(x=np.array([-1e-18, 10.0, 5.0]) * units.Mpc))
    assert entry["count"] == 3


def test_objects_outside_the_view_are_left_out_and_counted(tmp_path):
    entry, rows = ingested(tmp_path, table(), view=view_of(u=[0.0, 2.5]))
    assert (entry["count"], entry["outside"], {row["name"] for row in rows}) == (2, 1, {"a", "b"})


def test_without_a_periodic_box_nothing_is_wrapped(tmp_path):
    entry, _ = ingested(tmp_path, table(), view=view_of(u=[2.5, 12.5], periodic=False))
    assert (entry["count"], entry["outside"]) == (1, 2)


def test_a_view_wider_than_the_box_shows_each_periodic_image(tmp_path):
    _, rows = ingested(tmp_path, table(), view=view_of(u=[0.0, 20.0]))
    assert sorted(row["tilemap_u"] for row in rows if row["name"] == "a") == [1.0, 11.0]


def test_units_of_the_table_are_converted(tmp_path):
    _, rows = ingested(tmp_path, table(x=np.array([1000.0, 2000.0, 3000.0]) * units.kpc))
    assert sorted(row["tilemap_u"] for row in rows) == pytest.approx([1.0, 2.0, 3.0], rel=1e-12)


def test_the_unit_of_the_build_file_has_the_last_word_on_positions(tmp_path):
    section = ABC.model_copy(update={"unit": "0.5 Mpc"})
    _, rows = ingested(tmp_path, table(), section)
    assert sorted(row["tilemap_u"] for row in rows) == [0.5, 1.0, 1.5]


def test_a_size_keeps_the_unit_that_the_table_gives_it(tmp_path):
    section = ABC.model_copy(update={"unit": "Mpc", "size": "radius"})
    _, rows = ingested(tmp_path, table(radius=np.array([50.0, 100.0, 200.0]) * units.kpc), section)
    assert sorted(row["tilemap_size"] for row in rows) == pytest.approx([0.05, 0.1, 0.2])


def test_a_flat_chart_takes_two_columns_in_degrees(tmp_path):
    made = table(x=np.array([60.0, 120.0, 180.0]) * units.arcmin, y=np.array([1.0, 2.0, 3.0]) * units.deg)
    section = ABC.model_copy(update={"position": ["x", "y"]})
    _, rows = ingested(tmp_path, made, section, view_of(unit="deg", periodic=False, box=None, depth=[0.0, 1.0]))
    assert np.allclose(sorted((row["tilemap_u"], row["tilemap_v"]) for row in rows), [(1, 1), (2, 2), (3, 3)])


@pytest.mark.parametrize("name", ["objects.ecsv", "objects.fits", "objects.vot", "objects.csv"])
def test_each_kind_of_table_is_read(tmp_path, name):
    section = ABC.model_copy(update={"file": name, "unit": "Mpc"})
    made = table()
    if name.endswith(".vot"):
        made.write(tmp_path / name, format="votable")
    else:
        made.write(tmp_path / name)
    _, rows = ingested(tmp_path, None, section)
    assert {(row["name"], row["tilemap_u"], row["mass"]) for row in rows} == {("a", 1, 10), ("b", 2, 30), ("c", 3, 20)}


def test_every_column_of_the_input_is_kept_with_its_unit(tmp_path):
    made = table(spin=np.arange(9.0).reshape(3, 3) * units.km / units.s, flag=[True, False, True])
    entry, rows = ingested(tmp_path, made)
    kept = {column["name"]: column["unit"] for column in entry["columns"]}
    assert kept == {
        **dict.fromkeys(("x", "y", "z"), "Mpc"),
        **dict.fromkeys(("mass", "name", "flag"), ""),
        **dict.fromkeys(("spin_0", "spin_1", "spin_2"), "km / s"),
    }
    assert set(kept) < set(rows[0])


def test_the_parquet_file_says_the_units_by_itself(tmp_path):
    entry, _ = ingested(tmp_path, table(mass=np.array([1.0, 2.0, 3.0]) * units.Msun))
    metadata = duckdb.execute(
        "SELECT decode(value) FROM parquet_kv_metadata(?)", [str(tmp_path / "atlas" / entry["file"])]
    ).fetchone()
    assert metadata == ('{"x": "Mpc", "y": "Mpc", "z": "Mpc", "mass": "Msun"}',)


def test_columns_that_differ_only_in_case_are_both_kept(tmp_path):
    entry, rows = ingested(tmp_path, table(Mass=[7.0, 8.0, 9.0]))
    assert "Mass_" in {column["name"] for column in entry["columns"]}
    assert {(row["mass"], row["Mass_"]) for row in rows} == {(10.0, 7.0), (30.0, 8.0), (20.0, 9.0)}


def test_missing_numbers_are_null_and_left_out_of_the_range(tmp_path):
    made = table(colour=MaskedColumn([1, 2, 3], mask=[False, True, False]))
    entry, rows = ingested(tmp_path, made)
    described = next(column for column in entry["columns"] if column["name"] == "colour")
    assert (described["min"], described["max"]) == (1.0, 3.0)
    assert [row["colour"] for row in rows if row["name"] == "b"] == [None]


def test_large_identifiers_keep_every_digit(tmp_path):
    _, rows = ingested(tmp_path, table(long=[2**62 + 1, 2**62 + 2, 2**62 + 3]))
    assert {row["long"] for row in rows} == {2**62 + 1, 2**62 + 2, 2**62 + 3}


def test_a_table_entirely_outside_the_view_gives_an_empty_catalogue(tmp_path):
    view = view_of(u=[90.0, 91.0], periodic=False)
    entry, rows = ingested(tmp_path, table(), view=view)
    assert (entry["count"], entry["outside"], rows) == (0, 3, [])


def refusal(tmp_path, made, section=ABC):
    with pytest.raises(InputError) as caught:
        ingested(tmp_path, made, section)
    assert "\n" not in str(caught.value)
    assert not (tmp_path / "atlas").exists()
    return str(caught.value)


def test_a_missing_column_is_answered_with_those_that_are_there(tmp_path):
    message = refusal(tmp_path, table(), ABC.model_copy(update={"position": ["x", "y", "zz"]}))
    assert "'zz'" in message and "x, y, z, mass, name" in message


def test_rows_without_a_position_are_named_by_number(tmp_path):
    message = refusal(tmp_path, table(y=np.array([1.0, np.nan, np.inf]) * units.Mpc))
    assert "2 of 3 rows" in message and "row 2, 3 (counted from 1)" in message


def test_a_masked_position_is_a_missing_one(tmp_path):
    message = refusal(tmp_path, table(y=MaskedColumn([1.0, 2.0, 3.0], mask=[True, False, False], unit="Mpc")))
    assert "row 1 " in message


@pytest.mark.parametrize("unit", ["K", "Mpc / h"])
def test_a_unit_that_is_no_length_is_refused(tmp_path, unit):
    assert repr(unit) in refusal(tmp_path, table(x=MaskedColumn([1.0, 2.0, 3.0], unit=unit)))


def test_positions_without_any_unit_are_refused(tmp_path):
    assert "says no unit" in refusal(tmp_path, table(x=[1.0, 2.0, 3.0]))


def test_a_rank_of_text_is_refused(tmp_path):
    assert "'name' for rank holds text" in refusal(tmp_path, table(), ABC.model_copy(update={"rank": "name"}))


def test_a_missing_table_is_refused(tmp_path):
    assert "no such file" in refusal(tmp_path, None)


def test_a_table_of_an_unknown_kind_is_refused(tmp_path):
    (tmp_path / "objects.xlsx").write_bytes(b"PK")
    assert ".ecsv" in refusal(tmp_path, None, ABC.model_copy(update={"file": "objects.xlsx"}))


def test_a_damaged_table_is_refused_in_one_line(tmp_path):
    (tmp_path / "objects.fits").write_bytes(b"SIMPLE  =  rubbish")
    assert "cannot be read as fits" in refusal(tmp_path, None, ABC.model_copy(update={"file": "objects.fits"}))


def test_a_table_without_rows_is_refused(tmp_path):
    assert "no rows" in refusal(tmp_path, table()[:0])


def test_a_file_that_cannot_be_written_is_an_error_of_the_system(tmp_path):
    # A real limit of the kernel's, setrlimit(2), in a process of its own: the disk is as good as full after 2000 bytes.
    code = f"""
import resource, sys
sys.path[:0] = {sys.path!r}
from test_ingest import GROUPS, RUN32, ingest, view_of
resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000))
try:
    ingest(GROUPS, RUN32, view_of(), {str(tmp_path)!r})
except OSError as failure:
    print(type(failure).__name__, failure.filename, sep=":")
"""
    ran = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=120)
    assert ran.stdout == f"OSError:{tmp_path}/catalogue/objects.parquet\n", ran.stderr
