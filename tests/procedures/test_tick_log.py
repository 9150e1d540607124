"""Tick logs: what is read, and how everything else is named."""

from __future__ import annotations

import gzip
import io
import subprocess
import sys
import time
import zlib
from pathlib import Path

import numpy as np
import pytest

from registry.errors import Invalid, Refusal, TooLarge
from registry.procedures import tick_log
from registry.procedures.tick_log import read_tick_log

HEAD = "time_s,left_counts,right_counts\n"


def log(folder: Path, content: str | bytes, name: str = "run.csv") -> Path:
    path = folder / name
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def refused(folder: Path, content: str | bytes) -> Refusal:
    with pytest.raises(Refusal) as caught:
        read_tick_log(log(folder, content))
    return caught.value


def test_times_and_readings_come_out_as_they_stand(tmp_path: Path):
    read = read_tick_log(log(tmp_path, HEAD + "0.0,4294967290,7\n0.005,3,4294967295\n1e-2,9,0\n"))
    assert read.time_s.tolist() == [0.0, 0.005, 0.01]
    assert read.left_counts.tolist() == [4294967290, 3, 9]
    assert read.right_counts.tolist() == [7, 4294967295, 0]
    assert (read.time_s.dtype, read.left_counts.dtype) == (np.float64, np.int64)


def test_readings_of_63_bits_are_exact(tmp_path: Path):
    assert read_tick_log(log(tmp_path, f"{HEAD}0,{2**63 - 1},{2**53 + 1}\n")).left_counts[0] == 2**63 - 1


@pytest.mark.parametrize(
    "content",
    [
        HEAD + "0,1,2\n1,3,4",
        "\ufeff" + HEAD + "0,1,2\n1,3,4\n",
        (HEAD + "0,1,2\n1,3,4\n").replace("\n", "\r\n"),
        HEAD + "0,1,2\n\n1,3,4\n\n\n",
        HEAD + "0,1,2\n   \n1,3,4\n",
        HEAD + ' 0 , 1,2 \n"1","3","4"\n',
        '"time_s","left_counts","right_counts"\n0,1,2\n1,3,4\n',
        "right_counts,time_s,left_counts\n2,0,1\n4,1,3\n",
        HEAD + "0,1.0,2.\n1,3,4\n",
        HEAD + "+0,+1,2\n1.0e0,3,04\n",
    ],
)  # fmt: skip
def test_spellings_of_the_same_log_read_the_same(tmp_path: Path, content: str):
    for packed in (content.encode(), gzip.compress(content.encode())):
        read = read_tick_log(log(tmp_path, packed))
        assert (read.time_s.tolist(), read.left_counts.tolist(), read.right_counts.tolist()) == ([0, 1], [1, 3], [2, 4])


@pytest.mark.parametrize(
    ("content", "place", "remedy"),
    [
        ("", "run.csv row 1", "begin with the header time_s,left_counts,right_counts"),
        ("\n\n", "run.csv row 1", "begin with the header"),
        ("time_s;left_counts;right_counts\n0;1;2\n", "run.csv row 1", "semicolons: save the file with commas"),
        ("time_s\tleft_counts\tright_counts\n", "run.csv row 1", "separated by tabs"),
        ("time_s,left_counts\n0,1\n", "run.csv row 1", "has no column right_counts"),
        ("0,1,2\n", "run.csv row 1 column '0'", "is unknown: the columns are"),
        ("time_s,left_counts,right_counts,speed\n", "run.csv row 1 column 'speed'", "is unknown"),
        ("time_s,left_counts,right_counts,time_s\n", "run.csv row 1", "names time_s twice"),
        ("time_s,left_counts,right_counts\r0,1,2\r", "run.csv row 1", "save the file with line feeds"),
        (HEAD + "0,1,2\n1,x,4\n", "run.csv row 3 column left_counts", "'x' is no whole counter reading"),
        (HEAD + "0,1,2\n1,,4\n", "run.csv row 3 column left_counts", "'' is no whole counter reading"),
        (HEAD + "0,1,2\n1,3.5,4\n", "run.csv row 3 column left_counts", "'3.5' is no whole"),
        (HEAD + "0,1,2\n1,3,99999999999999999999\n", "run.csv row 3 column right_counts", "larger than any counter"),
        (HEAD + "0,1,2\n1,3," + "9" * 5000 + "\n", "run.csv row 3 column right_counts", "no whole counter reading"),
        (HEAD + "nan,1,2\n", "run.csv row 2 column time_s", "must be a finite number of seconds"),
        (HEAD + "0,1,2\n-Infinity,1,2\n", "run.csv row 3 column time_s", "must be a finite number"),
        (HEAD + "0,1,2\n1e999,1,2\n", "run.csv row 3 column time_s", "must be a finite number"),
        (HEAD + "0,1,2\n1_0,1,2\n", "run.csv row 3 column time_s", "'1_0' is no number of seconds"),
        (HEAD + "0,1,2\n08:00:01,1,2\n", "run.csv row 3 column time_s", "write it such as 12.345"),
        (HEAD + "0,1,2\n1,1,2,3\n", "run.csv row 3", "has 4 cells where the header has 3 columns"),
        (HEAD + "0,1,2\n\n\n1,1\n", "run.csv row 5", "has 2 cells"),
        (HEAD + '0,1,2\n1,"1,2\n', "run.csv row 3", "is no row of a CSV file"),
        (HEAD.encode() + b"0,1,2\n1,\xe9,2\n", "run.csv", "is not text in UTF-8"),
        ((HEAD + "0,1,2\n").encode("utf-16"), "run.csv", "is UTF-16 text: save it as UTF-8"),
        (HEAD + "0,1,2\n" + "x" * 20_000, "run.csv row 3", "longer than any row"),
        (b"\x1f\x8b" + b"no gzip", "run.csv", "is not whole as a gzip file"),
        (gzip.compress((HEAD + "0,1,2\n" * 5000).encode())[:-20], "run.csv", "copy or pack it again"),
        (gzip.compress((HEAD + "0,1,2\n").encode()) + b"rubbish", "run.csv", "is not whole as a gzip file"),
    ],
)  # fmt: skip
def test_what_cannot_be_read_is_named_with_file_row_column_and_remedy(
    tmp_path: Path, content: str | bytes, place: str, remedy: str
):
    refusal = refused(tmp_path, content)
    assert isinstance(refusal, Invalid)
    assert refusal.errors[0].pointer == place
    assert remedy in refusal.errors[0].detail


def test_a_cell_far_into_a_long_log_is_named_by_its_row(tmp_path: Path):
    rows = [f"{i * 0.005:.3f},{i},{i}" for i in range(150_000)]
    rows[140_000] = "700.0,oops,140000"
    refusal = refused(tmp_path, HEAD + "\n".join(rows))
    assert [error.pointer for error in refusal.errors] == ["run.csv row 140002 column left_counts"]


def test_many_mistakes_are_told_ten_at_a_time(tmp_path: Path):
    refusal = refused(tmp_path, HEAD + "x,y,z\n" * 100)
    assert len(refusal.errors) == 10
    assert refusal.errors[-1].pointer == "run.csv row 5 column time_s"


def test_rows_are_found_again_past_blank_ones(tmp_path: Path):
    read = read_tick_log(log(tmp_path, HEAD + "\n0,1,2\n\n\n1,3,4\n2,3,4\n"))
    assert [read.row_of(sample) for sample in range(3)] == [3, 6, 7]


def test_a_missing_log_is_refused(tmp_path: Path):
    with pytest.raises(Invalid, match=r"cannot be read \(No such file"):
        read_tick_log(tmp_path / "missing.csv")


def test_ten_million_samples_are_refused_before_the_rest_is_read(tmp_path: Path):
    block = "".join(f"{i},1,2\n" for i in range(100_000)).encode()
    path = tmp_path / "long.csv.gz"
    packer = zlib.compressobj(1, wbits=31)
    with path.open("wb") as file:
        file.write(packer.compress(HEAD.encode()))
        for _ in range(100):
            file.write(packer.compress(block))
        file.write(packer.flush())
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.truncate(size // 2)  # Reading to the end would say that it is cut short.
    with pytest.raises(TooLarge, match="more than 2,000,000 samples"):
        read_tick_log(path)


@pytest.mark.parametrize(
    ("words", "said"), [(True, "no CSV file|has 1 cells"), (False, "more than 10,000 rows without")]
)
def test_a_gzip_bomb_is_refused_without_unpacking_it(tmp_path: Path, words: bool, said: str):
    path = tmp_path / "bomb.csv.gz"
    packer = zlib.compressobj(9, wbits=31)
    blanks = (b"x" * 5000 + b"\n") * 200 if words else b"\n" * (1 << 20)
    with path.open("wb") as file:
        file.write(packer.compress(HEAD.encode()))
        for _ in range(60):
            file.write(packer.compress(blanks))
        file.write(packer.flush())
    assert path.stat().st_size < 1_000_000
    began = time.process_time()
    with pytest.raises(Refusal, match=said):
        read_tick_log(path)
    assert time.process_time() - began < 1.0  # The first megabyte tells.


def test_more_than_256_mb_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(tick_log, "MAX_UNPACKED_BYTES", 8_000_000)  # The same road, sooner at its end.
    path = tmp_path / "long.csv.gz"
    packer = zlib.compressobj(1, wbits=31)
    rows = "".join(f"{i:0200d},1,2\n" for i in range(10_000)).encode()
    with path.open("wb") as file:
        file.write(packer.compress(HEAD.encode()))
        for _ in range(5):
            file.write(packer.compress(rows))
        file.write(packer.flush())
    with pytest.raises(TooLarge, match="holds more than 8 MB"):
        read_tick_log(path)


def test_no_line_feed_at_all_is_refused_early(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    read: list[int] = []

    class Counting(io.BytesIO):
        def read(self, size: int | None = -1, /) -> bytes:
            piece = super().read(size)
            read.append(len(piece))
            return piece

    with pytest.raises(Invalid, match="longer than any row"):
        list(tick_log._blocks(Counting(b"1" * 50_000_000), "run.csv"))
    assert sum(read) < 2_000_000


@pytest.mark.benchmark
def test_an_hour_at_200_hz_is_read_within_300_mb_resident(tmp_path: Path):
    times = np.arange(720_000) * 0.005
    rows = "\n".join(f"{t:.3f},{i * 7 % 2**32},{i * 9 % 2**32}" for i, t in enumerate(times.tolist()))
    path = log(tmp_path, gzip.compress((HEAD + rows).encode(), 1), "hour.csv.gz")
    program = (
        "import sys; from pathlib import Path; from registry.procedures.tick_log import read_tick_log\n"
        "read = read_tick_log(Path(sys.argv[1]))\n"
        "peak = [x for x in Path('/proc/self/status').read_text().splitlines() if x.startswith('VmHWM')][0]\n"
        "print(read.time_s.size, int(peak.split()[1]) // 1024)"
    )
    done = subprocess.run([sys.executable, "-c", program, str(path)], capture_output=True, check=True, text=True)
    samples, peak_mb = map(int, done.stdout.split())
    assert samples == 720_000
    assert peak_mb < 300
