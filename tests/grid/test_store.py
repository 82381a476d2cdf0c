"""The grid on disk: what is written is read, and what is damaged is refused."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest

from specsolve.errors import InputError, StoreError, UsageError
from specsolve.grid.axes import Axis, choose_nodes, parse_axis_subset
from specsolve.grid.codes import CODE_TYPE
from specsolve.grid.store import HEADER_NAME, LINES_PER_BLOCK, ResponseGrid
from tests.grid.synthetic import synthetic_grid, synthetic_lines


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    return synthetic_grid(
        tmp_path_factory.mktemp("store"), synthetic_lines(35, 5), teff=[5000.0, 5250.0, 5500.0], logg=[4.0, 4.5],
        mh=[-0.5, 0.0], missing=((5000.0, 4.5, 0.0),),
    )  # fmt: skip


@pytest.fixture
def copy(written, tmp_path):
    return shutil.copytree(written.directory, tmp_path / "copy")


def change_header(directory, **entries):
    path = directory / HEADER_NAME
    path.write_text(json.dumps(json.loads(path.read_text()) | entries))


def test_reads_what_was_written(written):
    lines = synthetic_lines(35, 5)
    assert written.lines.identity == lines.identity
    assert written.lines.key.tolist() == lines.key.tolist()
    assert {name: len(values) for name, values in written.axes.items()} == {
        "teff": 3,
        "logg": 2,
        "mh": 2,
        "vmic": 8,
        "dA": 8,
    }
    assert written.treatments == ("lte",)
    assert written.missing("lte") == {(0, 1, 1): "left out of the synthetic grid"}
    assert written.node_valid("lte").sum() == 11
    assert [block.n_lines for block in written.blocks] == [LINES_PER_BLOCK, 8]
    assert written.locate([lines.key[37], "Fe I 1.000 0.000"]).tolist() == [37, -1]


def test_blocks_are_little_endian_and_mapped_not_loaded(written):
    codes = written.codes(written.blocks[0])
    assert isinstance(codes, np.memmap)
    assert codes.dtype == CODE_TYPE
    assert CODE_TYPE.str == "<u2"


def test_gather_joins_blocks_in_any_order(written):
    nodes = (np.array([2, 0]), np.array([0, 1]), np.array([1, 0]))
    lines = np.array([39, 0, 32, 31])
    got = written.gather("lte", nodes, lines)
    for k in range(2):
        for j, line in enumerate(lines):
            block = written.blocks[line // LINES_PER_BLOCK]
            expected = written.codes(block)[nodes[0][k], nodes[1][k], nodes[2][k], line - block.first_line]
            assert np.array_equal(got[k, j], expected)


def test_identity_follows_the_content(written, copy):
    assert ResponseGrid.open(copy).identity == written.identity
    change_header(copy, description="something else")
    assert ResponseGrid.open(copy).identity != written.identity


def test_unknown_treatment_is_refused(written):
    with pytest.raises(StoreError, match="no treatment 'nlte'"):
        written.node_valid("nlte")


def test_no_grid_there(tmp_path):
    with pytest.raises(StoreError, match="holds no finished grid"):
        ResponseGrid.open(tmp_path)
    with pytest.raises(StoreError, match="holds no finished grid"):
        ResponseGrid.open(tmp_path / "nowhere")


def test_another_schema_is_refused_with_its_number(copy):
    change_header(copy, schema=99)
    with pytest.raises(StoreError, match="schema 99") as caught:
        ResponseGrid.open(copy)
    assert caught.value.schema == 99


@pytest.mark.parametrize("text", ["", "{", "[1, 2]", '{"format": "something else", "schema": 1}', "\x00\xff\x12"])
def test_a_foreign_or_broken_header_is_refused(copy, text):
    (copy / HEADER_NAME).write_bytes(text.encode("latin-1"))
    with pytest.raises(StoreError):
        ResponseGrid.open(copy)


@pytest.mark.parametrize("entry", ["node_axes", "lines", "blocks"])
def test_a_header_that_lacks_an_entry_is_refused(copy, entry):
    content = json.loads((copy / HEADER_NAME).read_text())
    del content[entry]
    (copy / HEADER_NAME).write_text(json.dumps(content))
    with pytest.raises(StoreError, match="damaged"):
        ResponseGrid.open(copy)


def test_one_changed_byte_is_noticed(copy, written):
    path = copy / written.blocks[1].file
    content = bytearray(path.read_bytes())
    content[-100] ^= 1
    path.write_bytes(content)
    with pytest.raises(StoreError, match="wrong checksum"):
        ResponseGrid.open(copy)


@pytest.mark.parametrize("keep", [0, 50, 5000])
def test_a_truncated_block_is_noticed(copy, written, keep):
    path = copy / written.blocks[0].file
    path.write_bytes(path.read_bytes()[:keep])
    with pytest.raises(StoreError, match=r"cannot be read|wrong checksum"):
        ResponseGrid.open(copy)


def test_a_lost_block_is_noticed(copy, written):
    (copy / written.blocks[0].file).unlink()
    with pytest.raises(StoreError, match="cannot be read"):
        ResponseGrid.open(copy)


def test_a_block_of_another_shape_is_noticed(copy, written):
    np.save(copy / written.blocks[0].file, np.zeros((2, 2), dtype=CODE_TYPE))
    with pytest.raises(StoreError, match="the header says"):
        ResponseGrid.open(copy)


def test_objects_are_never_unpickled(copy, written):
    np.save(copy / written.blocks[0].file, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    with pytest.raises(StoreError, match="cannot be read"):
        ResponseGrid.open(copy, verify=False)


def test_axis_subsets():
    assert parse_axis_subset("4500:6000:250").tolist() == [4500, 4750, 5000, 5250, 5500, 5750, 6000]
    assert parse_axis_subset("-1:0:0.5").tolist() == [-1.0, -0.5, 0.0]
    assert parse_axis_subset("2.5").tolist() == [2.5]
    assert parse_axis_subset("3,1,2").tolist() == [1.0, 2.0, 3.0]
    for wrong in ("", "a", "1:2", "1:2:0", "2:1:0.5", "1:2:0.3", "1:2:-1", "1:2:3:4", "nan", "inf", "1,nan"):
        with pytest.raises(UsageError):
            parse_axis_subset(wrong)


def test_nodes_must_have_atmospheres():
    available = np.array([4.0, 4.5, 5.0])
    assert choose_nodes("logg", available, None).tolist() == [4.0, 4.5, 5.0]
    assert choose_nodes("logg", available, np.array([5.0, 4.0])).tolist() == [4.0, 5.0]
    with pytest.raises(InputError, match=r"4\.25"):
        choose_nodes("logg", available, np.array([4.0, 4.25]))


@pytest.mark.parametrize("values", [[], [1.0, 1.0], [2.0, 1.0], [1.0, np.nan], [[1.0]]])
def test_an_axis_must_rise(values):
    with pytest.raises(InputError):
        Axis("logg", "dex", values)


def test_a_grid_travels_to_another_process_by_its_folder(written, copy):
    remake, arguments = written.__reduce__()
    assert remake(*arguments).identity == written.identity
    remake, arguments = ResponseGrid.open(copy).__reduce__()
    change_header(copy, description="something else")
    with pytest.raises(StoreError, match="has changed"):
        remake(*arguments)
