"""What verify must find, one kind of damage at a time, and what it must not."""

import json
import shutil

import numpy as np
import pytest
from atlas_maker import EPOCH, SheetData, gaussian_field, make_atlas, make_sheets, write_array, write_atlas

from tilemap.errors import InputError
from tilemap.pyramid.coding import LinearCoding, LogCoding
from tilemap.pyramid.publish import write_checksums
from tilemap.pyramid.store import ArrayReader, pack_tile, write_shard
from tilemap.pyramid.verify import TilePlace, verify


@pytest.fixture(scope="module")
def sound(tmp_path_factory):
    """1024 x 512 pixels, 2 slabs, 2 levels."""
    return make_atlas(tmp_path_factory.mktemp("verify") / "sound", columns=1024, rows=512, slabs=2)


@pytest.fixture
def atlas(sound, tmp_path):
    return shutil.copytree(sound, tmp_path / "a.atlas")


def rewrite_tile(array_folder, place, change):
    """Put other codes in the place of a tile: a whole, valid file with wrong numbers in it."""
    reader = ArrayReader(array_folder)
    assert reader.shard_grid >= reader.tiles  # one shard a slab
    slab = place[0]
    tiles = {(i, j): reader.blob(slab, i, j) for i in range(reader.tiles[0]) for j in range(reader.tiles[1])}
    tiles[place[1:]] = pack_tile(change(reader.codes(*place).copy()))
    write_shard(array_folder, (slab, 0, 0), tiles)


def tiles_found(findings):
    return {finding.tile for finding in findings if finding.tile}


def test_a_sound_atlas_has_nothing_wrong(sound):
    assert verify(sound) == []


def test_sizes_that_are_no_power_of_two_have_nothing_wrong(tmp_path):
    assert verify(make_atlas(tmp_path / "a", columns=1536, rows=512, slabs=1)) == []


def test_signed_linear_sheets_have_nothing_wrong(tmp_path):
    gas, temperature, _ = make_sheets(1024, 512, 2)
    speed = np.stack([300 * gaussian_field((512, 1024), -3.0, seed) for seed in (5, 6)]).astype(np.float32)
    speed[np.isnan(temperature.values)] = np.nan
    momentum = np.nan_to_num(gas.values * speed).astype(np.float32)
    sheets = [
        gas,
        SheetData("speed", "mean", speed, "km / s", weight="gas", coding=LinearCoding(-2000.0, 0.1)),
        SheetData("momentum", "sum", momentum, "Msun km / (s kpc2)", total_unit="Msun km / s",
                  coding=LinearCoding(-2.0e11, 1e7)),
    ]  # fmt: skip
    assert verify(write_atlas(tmp_path / "a", sheets)) == []


def test_proper_areas_have_nothing_wrong(tmp_path):
    gas = make_sheets(512, 512, 1)[0]
    gas.area = "proper"
    assert verify(write_atlas(tmp_path / "a", [gas])) == []


def test_values_that_mostly_lie_below_the_lowest_code_have_nothing_wrong(tmp_path):
    sheets = make_sheets(1024, 512, 2)
    for sheet in sheets:
        sheet.coding = LogCoding(6.0, 0.002)
    assert verify(write_atlas(tmp_path / "a", sheets)) == []


@pytest.mark.parametrize("share", [0.02, 0.3, 0.5, 0.7, 0.9])
@pytest.mark.parametrize("fresh_checksums", [False, True])
def test_a_flipped_byte_in_the_tiles_is_found_and_its_tile_named(atlas, share, fresh_checksums):
    reader = ArrayReader(atlas / EPOCH / "gas" / "0")
    path, offset, length = reader.locate(1, 0, 1)
    data = bytearray(path.read_bytes())
    data[offset + int(length * share)] ^= 0x20
    path.write_bytes(data)
    if fresh_checksums:
        write_checksums(atlas)
    assert TilePlace(EPOCH, "gas", 0, 1, 0, 1) in tiles_found(verify(atlas))


def test_a_flipped_byte_that_changes_no_number_is_found_and_its_tile_named(atlas):
    path, offset, _ = ArrayReader(atlas / EPOCH / "gas" / "0").locate(1, 0, 1)
    data = bytearray(path.read_bytes())
    data[offset + 4] ^= 1  # the time stamp of the gzip member, RFC 1952
    path.write_bytes(data)
    (finding,) = verify(atlas)
    assert finding.tile == TilePlace(EPOCH, "gas", 0, 1, 0, 1)


@pytest.mark.parametrize("back", [2, 10, 60])
@pytest.mark.parametrize("fresh_checksums", [False, True])
def test_a_flipped_byte_in_a_shard_index_is_found(atlas, back, fresh_checksums):
    path = atlas / EPOCH / "temperature" / "0" / "c" / "0" / "0" / "0"
    data = bytearray(path.read_bytes())
    data[-back] ^= 1
    path.write_bytes(data)
    if fresh_checksums:
        write_checksums(atlas)
    found = verify(atlas)
    assert [(f.path, "checksum" in f.what) for f in found] == [(f"{EPOCH}/temperature/0/c/0/0/0", True)]


@pytest.mark.parametrize("name", ["atlas.json", f"{EPOCH}/gas/zarr.json"])
def test_a_changed_description_is_found(atlas, name):
    (atlas / name).write_bytes((atlas / name).read_bytes() + b"\n")
    assert [f.path for f in verify(atlas)] == [name]


@pytest.mark.parametrize("sheet", ["gas", "temperature", "stars"])
@pytest.mark.parametrize("array", ["0", "1", "whole/0", "whole/1"])
@pytest.mark.parametrize("fresh_checksums", [False, True])
def test_a_missing_shard_is_found(atlas, sheet, array, fresh_checksums):
    name = f"{EPOCH}/{sheet}/{array}/c/0/0/0"
    (atlas / name).unlink()
    if fresh_checksums:
        write_checksums(atlas)
        assert verify(atlas) != []
    else:
        assert name in [f.path for f in verify(atlas) if f.what.startswith("is missing")]


def test_a_missing_shard_is_named_by_sheet_level_and_slab(atlas):
    (atlas / EPOCH / "gas" / "0" / "c" / "1" / "0" / "0").unlink()
    missing = [f for f in verify(atlas) if "is missing" in f.what]
    assert "sheet gas, level 0, slab 1" in str(missing[0])


def test_a_file_too_many_is_found(atlas):
    (atlas / EPOCH / "notes.txt").write_text("mine")
    assert [f.path for f in verify(atlas)] == [f"{EPOCH}/notes.txt"]


def test_missing_checksums_are_found(atlas):
    (atlas / "checksums.json").unlink()
    assert [f.path for f in verify(atlas)] == ["checksums.json"]


@pytest.mark.parametrize("sheet", ["gas", "temperature", "stars"])
@pytest.mark.parametrize("stack", ["", "whole/"])
def test_a_level_that_is_not_the_average_is_found_though_checksums_are_fresh(atlas, sheet, stack):
    def brighter(codes):
        return np.where(codes > 0, codes + 5, 0).astype(np.uint16)  # 2.3 %

    rewrite_tile(atlas / EPOCH / sheet / stack / "1", (0, 0, 0), brighter)
    write_checksums(atlas)
    slab = "whole" if stack else 0
    assert TilePlace(EPOCH, sheet, 1, slab, 0, 0) in tiles_found(verify(atlas))


def test_a_level_averaged_from_codes_is_found(atlas):
    fine, coarse = (ArrayReader(atlas / EPOCH / "gas" / level) for level in "01")
    codes = np.zeros((512, 512))
    both = np.hstack([fine.codes(0, 0, j) for j in range(2)]).astype(np.float64)
    codes[:256] = both.reshape(256, 2, 512, 2).mean(axis=(1, 3))
    rewrite_tile(coarse.folder, (0, 0, 0), lambda _: np.rint(codes).astype(np.uint16))
    write_checksums(atlas)
    assert TilePlace(EPOCH, "gas", 1, 0, 0, 0) in tiles_found(verify(atlas))


def test_a_single_wrong_pixel_is_found(atlas):
    def spoil(codes):
        codes[17, 400] += 40
        return codes

    rewrite_tile(atlas / EPOCH / "gas" / "1", (1, 0, 0), spoil)
    write_checksums(atlas)
    (finding,) = (f for f in verify(atlas) if f.tile == TilePlace(EPOCH, "gas", 1, 1, 0, 0))
    assert finding.what == "1 pixel is not the average of level 0"


def test_a_whole_that_is_not_the_sum_of_its_slabs_is_found(atlas):
    for level in ("0", "1"):
        reader = ArrayReader(atlas / EPOCH / "gas" / "whole" / level)
        for row, column in np.ndindex(reader.tiles):
            rewrite_tile(reader.folder, (0, row, column), lambda codes: np.where(codes > 0, codes + 4, 0).astype("u2"))
    write_checksums(atlas)
    assert TilePlace(EPOCH, "gas", 1, "whole", 0, 0) in tiles_found(verify(atlas))


@pytest.mark.parametrize("factor", [0.99, 1.01])
def test_a_sheet_that_does_not_add_up_to_its_total_is_found(atlas, factor):
    described = json.loads((atlas / "atlas.json").read_text())
    sheet = described["epochs"][0]["sheets"][0]
    sheet["totals"] = [total * factor for total in sheet["totals"]]
    sheet["total"] *= factor
    (atlas / "atlas.json").write_text(json.dumps(described))
    write_checksums(atlas)
    assert [("adds up" in f.what, f.path) for f in verify(atlas)] == [(True, f"{EPOCH}/gas/0")] * 2


def test_a_total_in_a_unit_that_the_sheet_cannot_give_is_found(atlas):
    described = json.loads((atlas / "atlas.json").read_text())
    described["epochs"][0]["sheets"][2]["total_unit"] = "K"
    (atlas / "atlas.json").write_text(json.dumps(described))
    write_checksums(atlas)
    assert {f.path for f in verify(atlas)} == {"atlas.json"}


def test_an_array_of_the_wrong_size_is_found(atlas):
    path = atlas / EPOCH / "stars" / "1" / "zarr.json"
    path.write_text(path.read_text().replace("2,\n  256,\n  512", "2,\n  512,\n  512"))
    write_checksums(atlas)
    assert [f.path for f in verify(atlas)] == [f"{EPOCH}/stars/1/zarr.json"]


@pytest.mark.parametrize(
    ("change", "word"),
    [
        (lambda d: d.pop("view"), "view is missing"),
        (lambda d: d.update(levels=4), "levels is 4"),
        (lambda d: d.update(slabs=[0, 50, 40]), "rising edges"),
        (lambda d: d["view"].update(u=[5, 5]), "no interval"),
        (lambda d: d["epochs"][0]["sheets"][1].update(weight="dust"), "'dust'"),
        (lambda d: d["epochs"][0]["sheets"][0].update(kind="median"), "'median'"),
        (lambda d: d["epochs"][0]["sheets"][0].update(unit="Msun / kcp2"), "kcp2"),
        (lambda d: d["epochs"][0]["sheets"][0].update(coding="cubic"), "cubic"),
        (lambda d: d["epochs"][0]["sheets"][0].update(total=1.0), "add up"),
        (lambda d: d["epochs"][0]["sheets"][0].update(totals=[1.0]), "2 slabs"),
        (lambda d: d["epochs"][0]["sheets"].clear(), "no sheets"),
        (lambda d: d.update(epochs=[]), "no epochs"),
        (lambda d: d.update(epochs=[{}]), "'name'"),
        (lambda d: d.update(pixels=[1000, 1000]), "multiple of 512"),
    ],
)
def test_a_description_that_makes_no_sense_is_found(atlas, change, word):
    described = json.loads((atlas / "atlas.json").read_text())
    change(described)
    (atlas / "atlas.json").write_text(json.dumps(described))
    write_checksums(atlas)
    assert any(f.path == "atlas.json" and word in f.what for f in verify(atlas))


def test_progress_goes_from_nothing_to_all(sound):
    told = []
    verify(sound, lambda phase, done, total: told.append((phase, done, total)))
    assert told[0] == ("checksums", 0, 1)
    assert told[-1][0] == "tiles"
    assert told[-1][1] == told[-1][2] > 0


def test_what_is_no_atlas_is_refused(tmp_path):
    with pytest.raises(InputError, match="is not an atlas"):
        verify(tmp_path)


def test_a_finding_reads_as_one_line_with_file_tile_and_fault(atlas):
    write_array(atlas / EPOCH / "gas" / "1", np.zeros((2, 256, 512), dtype=np.uint16))
    write_checksums(atlas)
    lines = [str(finding) for finding in verify(atlas)]
    expected = f"{EPOCH}/gas/1/c/0/0/0: sheet gas, level 1, slab 0, tile row 0, column 0: "
    assert any(line.startswith(expected) and "average of level 0" in line for line in lines)


@pytest.mark.parametrize("left", [b"{", b"{}", None])
def test_an_atlas_that_no_longer_says_what_it_is_is_damaged(atlas, left):
    described = atlas / "atlas.json"
    described.unlink() if left is None else described.write_bytes(left)
    assert "atlas.json" in {finding.path for finding in verify(atlas)}
