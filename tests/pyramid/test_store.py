"""Arrays on disk, against zarr-python, Python's gzip module and the published check value of CRC-32C."""

import gzip
import json
import struct
from concurrent.futures import ThreadPoolExecutor

import google_crc32c
import numpy as np
import pytest
import zarr
from atlas_maker import EPOCH, make_atlas, write_array

from tilemap.errors import InputError, NotSoError
from tilemap.pyramid.reader import unpack_tile
from tilemap.pyramid.shards import DamagedError, pack_shard, read_index
from tilemap.pyramid.store import ArrayReader, create_array, create_group, pack_tile, write_shard


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    return make_atlas(tmp_path_factory.mktemp("store") / "a.atlas", columns=1536, rows=1024, slabs=2)


@pytest.fixture
def tile():
    codes = np.random.default_rng(3).integers(0, 40, (512, 512), dtype=np.uint16).cumsum(axis=1, dtype=np.uint16)
    return codes


def stitched(reader):
    """All codes of an array, by our reader."""
    rows = [
        [[reader.codes(slab, i, j) for j in range(reader.tiles[1])] for i in range(reader.tiles[0])]
        for slab in range(reader.shape[0])
    ]
    return np.stack([np.block(slab) for slab in rows])[:, : reader.shape[1], : reader.shape[2]]


@pytest.mark.parametrize("sheet", ["gas", "temperature", "stars"])
@pytest.mark.parametrize("stack", ["", "whole/"])
@pytest.mark.parametrize("level", [0, 1, 2])
def test_zarr_python_reads_from_every_level_what_our_reader_reads(atlas, sheet, stack, level):
    array = zarr.open(atlas, mode="r")[f"{EPOCH}/{sheet}/{stack}{level}"]
    ours = stitched(ArrayReader(atlas / EPOCH / sheet / stack / str(level)))
    assert ours.any()
    assert np.array_equal(array[:], ours)


def test_zarr_python_finds_the_names_of_the_dimensions_and_the_attributes(atlas):
    group = zarr.open(atlas, mode="r")[EPOCH]["gas"]
    assert group["0"].metadata.dimension_names == ("slab", "row", "column")
    assert group.attrs["unit"] == "Msun / kpc2"


def test_an_array_written_by_zarr_python_under_our_metadata_is_read_by_us(tmp_path):
    create_array(tmp_path / "0", (1, 1024, 1024))
    codes = np.random.default_rng(4).integers(0, 9, (1, 1024, 1024), dtype=np.uint16)
    zarr.open(tmp_path / "0", mode="r+")[:] = codes
    assert np.array_equal(stitched(ArrayReader(tmp_path / "0")), codes)


def test_several_shards_are_read_back_by_zarr_python(tmp_path):
    create_array(tmp_path / "0", (1, 4608, 512))
    codes = np.zeros((1, 4608, 512), dtype=np.uint16)
    codes[0, 100, 5], codes[0, 4500, 7] = 11, 22
    write_array(tmp_path / "0", codes)
    array = zarr.open(tmp_path / "0", mode="r")
    assert (array[0, 100, 5], array[0, 4500, 7], array[:].sum()) == (11, 22, 33)


def test_a_packed_tile_is_a_gzip_member_that_pythons_gzip_opens(tile):
    assert gzip.decompress(pack_tile(tile)) == tile.astype("<u2").tobytes()


def test_a_packed_tile_carries_no_time_and_no_name(tile):
    # RFC 1952, 2.3: magic, deflate, no flags, MTIME 0.
    assert pack_tile(tile)[:8] == bytes([0x1F, 0x8B, 8, 0, 0, 0, 0, 0])


def test_packing_in_many_threads_gives_the_same_bytes(tile):
    with ThreadPoolExecutor(4) as pool:
        assert len(set(pool.map(pack_tile, [tile.copy() for _ in range(8)]))) == 1


def test_a_tile_unpacks_to_what_was_packed(tile):
    assert np.array_equal(unpack_tile(pack_tile(tile)), tile)


def test_an_empty_tile_is_packed_to_nothing():
    assert pack_tile(np.zeros((512, 512), dtype=np.uint16)) is None


@pytest.mark.parametrize("codes", [np.zeros((256, 256), np.uint16), np.zeros((512, 512), np.int32)])
def test_what_is_not_a_tile_is_not_packed(codes):
    with pytest.raises(ValueError, match="a tile is"):
        pack_tile(codes)


def test_no_file_is_written_for_a_shard_without_tiles(tmp_path):
    create_array(tmp_path / "0", (1, 512, 512))
    assert write_shard(tmp_path / "0", (0, 0, 0), {(0, 0): None}) == 0
    assert not (tmp_path / "0" / "c").exists()


def test_a_shard_that_has_become_empty_is_taken_away(tmp_path, tile):
    create_array(tmp_path / "0", (1, 512, 512))
    write_shard(tmp_path / "0", (0, 0, 0), {(0, 0): pack_tile(tile)})
    write_shard(tmp_path / "0", (0, 0, 0), {})
    assert not (tmp_path / "0" / "c" / "0" / "0" / "0").exists()


def test_nothing_is_left_beside_a_written_shard(tmp_path, tile):
    create_array(tmp_path / "0", (1, 512, 512))
    size = write_shard(tmp_path / "0", (0, 0, 0), {(0, 0): pack_tile(tile)})
    (only,) = (tmp_path / "0" / "c" / "0" / "0").iterdir()
    assert (only.name, only.stat().st_size) == ("0", size)


def test_empty_places_take_no_space_in_a_shard(tmp_path, tile):
    create_array(tmp_path / "0", (1, 4096, 4096))
    blob = pack_tile(tile)
    # Zarr v3 sharding codec: 16 bytes for each of 64 places, and 4 of checksum.
    assert write_shard(tmp_path / "0", (0, 0, 0), {(3, 5): blob}) == len(blob) + 64 * 16 + 4


def test_the_order_in_which_tiles_come_does_not_change_a_shard():
    tiles = {(1, 0): b"one", (0, 1): b"two", (0, 0): b"three"}
    assert pack_shard(tiles, (2, 2)) == pack_shard(dict(reversed(tiles.items())), (2, 2))


def test_a_tile_outside_its_shard_is_refused():
    with pytest.raises(ValueError, match="no place"):
        pack_shard({(2, 0): b"x"}, (2, 2))


def test_the_checksum_is_crc_32c():
    # Catalogue of parametrised CRC algorithms, CRC-32/ISCSI: check value for "123456789".
    assert google_crc32c.value(b"123456789") == 0xE3069283


def test_the_index_ends_with_the_crc_32c_of_its_entries():
    shard = pack_shard({(0, 0): b"tile"}, (1, 2))
    assert struct.unpack("<I", shard[-4:])[0] == google_crc32c.value(shard[-36:-4])


def test_an_index_reads_back_as_offsets_and_lengths():
    shard = pack_shard({(0, 0): b"abc", (1, 0): b"defgh"}, (2, 2))
    assert read_index(shard[-68:], len(shard), 4) == [(0, 3), None, (3, 5), None]


@pytest.mark.parametrize("position", range(36))
def test_a_flipped_byte_anywhere_in_an_index_is_found(position):
    end = bytearray(pack_shard({(0, 0): b"tile"}, (1, 2))[-36:])
    end[position] ^= 0x10
    with pytest.raises(DamagedError, match="checksum"):
        read_index(bytes(end), 40, 2)


def test_an_index_that_points_beyond_the_file_is_found():
    shard = pack_shard({(0, 0): b"a long tile"}, (1, 1))
    with pytest.raises(DamagedError, match="beyond"):
        read_index(shard[-20:], len(shard) - 3, 1)


def test_a_shard_cut_short_is_named(tmp_path, tile):
    create_array(tmp_path / "0", (1, 512, 512))
    write_shard(tmp_path / "0", (0, 0, 0), {(0, 0): pack_tile(tile)})
    path = tmp_path / "0" / "c" / "0" / "0" / "0"
    path.write_bytes(path.read_bytes()[:7])
    with pytest.raises(DamagedError, match="c/0/0/0 is 7 bytes long"):
        ArrayReader(tmp_path / "0").locate(0, 0, 0)


@pytest.mark.parametrize("position", [12, 300, 5000, -9, -5, -2])
def test_a_flipped_bit_in_a_tile_is_found_when_it_is_unpacked(tile, position):
    blob = bytearray(pack_tile(tile))
    blob[position] ^= 0x04
    with pytest.raises(DamagedError):
        unpack_tile(bytes(blob))


@pytest.mark.parametrize("spoil", [lambda b: b[:-1], lambda b: b[: len(b) // 2], lambda b: b"", lambda b: b + b"\0"])
def test_a_tile_that_is_not_one_whole_member_is_refused(tile, spoil):
    with pytest.raises(DamagedError):
        unpack_tile(spoil(pack_tile(tile)))


def test_a_member_that_holds_no_tile_is_refused():
    with pytest.raises(DamagedError, match="3 bytes"):
        unpack_tile(gzip.compress(b"abc"))


def test_damage_is_a_thing_that_is_not_so():
    assert issubclass(DamagedError, NotSoError)


def test_locate_says_where_the_stored_bytes_are(atlas):
    reader = ArrayReader(atlas / EPOCH / "gas" / "0")
    path, offset, length = reader.locate(1, 1, 2)
    assert path.read_bytes()[offset : offset + length] == reader.blob(1, 1, 2)


def test_an_empty_tile_is_nowhere(atlas):
    assert ArrayReader(atlas / EPOCH / "stars" / "0").locate(0, 0, 0) is None


@pytest.mark.parametrize("place", [(2, 0, 0), (0, 2, 0), (0, 0, 3), (-1, 0, 0), (0, -1, 0)])
def test_a_place_that_is_not_there_is_refused_saying_which_are(atlas, place):
    with pytest.raises(InputError, match="2 slabs, 2 rows and 3 columns"):
        ArrayReader(atlas / EPOCH / "gas" / "0").locate(*place)


def test_one_reader_serves_many_threads(atlas):
    reader = ArrayReader(atlas / EPOCH / "gas" / "0")
    places = [(slab, row, column) for slab in range(2) for row in range(2) for column in range(3)] * 4
    with ThreadPoolExecutor(8) as pool:
        read = list(pool.map(lambda place: reader.codes(*place), places))
    assert all(np.array_equal(a, b) for a, b in zip(read[:12], read[12:24], strict=True))


def test_a_folder_without_an_array_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"has no zarr\.json"):
        ArrayReader(tmp_path)


def test_a_group_is_not_taken_for_an_array(tmp_path):
    create_group(tmp_path / "g", {"a": 1})
    with pytest.raises(InputError, match="not an array of an atlas"):
        ArrayReader(tmp_path / "g")


def test_an_array_of_another_make_is_refused(tmp_path):
    zarr.create_array(tmp_path / "z", shape=(1, 512, 512), chunks=(1, 512, 512), dtype="uint16")
    with pytest.raises(InputError, match="not an array of an atlas"):
        ArrayReader(tmp_path / "z")


def test_attributes_must_be_json(tmp_path):
    with pytest.raises(ValueError, match="JSON"):
        create_group(tmp_path / "g", {"a": float("nan")})
    assert not list((tmp_path / "g").glob("*"))


def test_metadata_is_the_zarr_version_3_of_an_array(tmp_path):
    create_array(tmp_path / "0", (3, 768, 768))
    metadata = json.loads((tmp_path / "0" / "zarr.json").read_text())
    assert metadata["chunk_grid"]["configuration"]["chunk_shape"] == [1, 1024, 1024]
