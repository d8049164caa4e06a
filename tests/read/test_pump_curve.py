"""A pump's table comes out as written; a stranger's file is refused with its line."""

import pytest

from morph.core.errors import InputError
from morph.read.pump_curve import read_pump_curve

pytestmark = pytest.mark.quick


def write(folder, content):
    path = folder / "pump.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


@pytest.mark.parametrize(
    "content",
    ["0,3\n10,2.5\n20,0\n", "flow L/min;head bar\n0;3\n10;2.5\n\n20;0\n", "\ufeffQ,H\r\n0,3\r\n10,2.5\r\n20,0"],
)
def test_points_come_out(tmp_path, content):
    flow, head = read_pump_curve(write(tmp_path, content))
    assert flow.tolist() == [0.0, 10.0, 20.0] and head.tolist() == [3.0, 2.5, 0.0]


@pytest.mark.parametrize(
    "content",
    [
        "",
        "flow,head\n",
        "0,3\n",
        "0,3\n10\n",
        "0,3\n10,2,1\n",
        "0,3\n10,x\n",
        "0,3\n10,nan\n",
        "0,3\n10,inf\n",
        "0,3\n0,2\n",
        "10,3\n5,2\n",
        "0,3\n10,4\n",
        "0,0\n10,0\n",
        "-1,3\n10,2\n",
        "0,3\n1e9,2\n",
        "0,3\n10,-2\n",
        "a,b\nc,d\n",
        "".join(f"{k},3\n" for k in range(2000)),
    ],
)
def test_values_that_are_no_curve(tmp_path, content):
    with pytest.raises(InputError) as caught:
        read_pump_curve(write(tmp_path, content))
    assert caught.value.code == "pump-values" and "pump.csv: line" in caught.value.where


def test_files_that_cannot_be_read(tmp_path):
    for path in (tmp_path / "none.csv", tmp_path, write(tmp_path, b"\xff\xfe0,3"), write(tmp_path, b"0,3\n" * 50_000)):
        with pytest.raises(InputError) as caught:
            read_pump_curve(path)
        assert caught.value.code == "pump-unreadable"
