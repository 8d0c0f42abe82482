"""Records of counts as files: growing, cut off, out of order, repeated, and imported."""

from __future__ import annotations

import multiprocessing
import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest
import tifffile

from recon.cli import main
from recon.counts import Acquisition, CountsRecord, CountsWriter, convert
from recon.counts.importer import import_counts
from recon.errors import InputError
from tests.counting import SAMPLES, acquisition, counted, instrument, protocol, specimen
from tests.descriptions import line, run_with_file_limit


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> CountsRecord:
    counts, _ = counted(tmp_path_factory.mktemp("counts") / "c.h5", shots=6)
    return counts


def rewritten(whole: CountsRecord, path: Path, rows: list[int], **changes: object) -> CountsRecord:
    """The rows picked, in that order, as a new file."""
    clock = changes.get("clock", whole.clock_time[rows])
    with CountsWriter(
        path,
        whole.instrument,
        whole.protocol,
        whole.acquisition,
        whole.description_json,
        compression=None,
    ) as writer:
        for place, row in enumerate(rows):
            writer.append(int(whole.shot[row]), float(clock[place]), *whole.row(row))
    return CountsRecord.open(path)


def said(record: CountsRecord) -> str:
    return " | ".join(str(one) for one in convert(record).findings)


def test_rows_come_back_as_they_were_written(whole: CountsRecord) -> None:
    rows = [(where.start, signal.copy()) for where, signal, _ in whole.rows(1)]
    assert [row for row, _ in rows] == list(range(6))
    for row, signal in rows:
        assert np.array_equal(signal[0], whole.row(row)[0])
    assert whole.nbytes == 2 * 6 * SAMPLES * 16 * 256 * 2


def test_compressed_and_plain_hold_the_same(whole: CountsRecord, tmp_path: Path) -> None:
    with CountsWriter(
        tmp_path / "z.h5", whole.instrument, whole.protocol, whole.acquisition
    ) as writer:
        for row in range(6):
            writer.append(row, float(row), *whole.row(row))
    packed = CountsRecord.open(tmp_path / "z.h5")
    assert np.array_equal(packed.row(3)[1], whole.row(3)[1])
    assert packed.path.stat().st_size < 0.8 * whole.path.stat().st_size


def _write_slowly(path: str, source: str, go: object, done: object) -> None:
    whole = CountsRecord.open(source)
    with CountsWriter(path, whole.instrument, whole.protocol, whole.acquisition) as writer:
        for row in range(6):
            writer.append(row, float(row), *whole.row(row))
            if row == 2:
                done.set()  # type: ignore[attr-defined]
                go.wait(30)  # type: ignore[attr-defined]


def test_a_file_is_read_while_it_grows(whole: CountsRecord, tmp_path: Path) -> None:
    context = multiprocessing.get_context("spawn")
    go, done = context.Event(), context.Event()
    path = tmp_path / "growing.h5"
    writer = context.Process(target=_write_slowly, args=(str(path), str(whole.path), go, done))
    writer.start()
    assert done.wait(60)
    early = CountsRecord.open(path)
    assert len(early) == 3 and np.array_equal(early.row(2)[0], whole.row(2)[0])
    assert len(convert(early).record) == 3
    go.set()
    writer.join(60)
    assert len(CountsRecord.open(path)) == 6


def test_a_writer_that_is_killed_leaves_whole_rows_and_another_goes_on(
    whole: CountsRecord, tmp_path: Path
) -> None:
    context = multiprocessing.get_context("spawn")
    go, done = context.Event(), context.Event()
    path = tmp_path / "killed.h5"
    writer = context.Process(target=_write_slowly, args=(str(path), str(whole.path), go, done))
    writer.start()
    assert done.wait(60)
    writer.kill()
    writer.join(30)
    assert len(CountsRecord.open(path)) == 3
    with CountsWriter(path, whole.instrument, whole.protocol, whole.acquisition) as again:
        again.append(3, 3.0, *whole.row(3))
    record = CountsRecord.open(path)
    assert record.shot.tolist() == [0, 1, 2, 3]
    assert np.array_equal(record.row(3)[0], whole.row(3)[0])


def _hold(path: str, go: object, done: object) -> None:
    with h5py.File(path, "r+"):
        done.set()  # type: ignore[attr-defined]
        go.wait(30)  # type: ignore[attr-defined]


def test_a_file_that_another_program_writes_is_one_line(
    whole: CountsRecord, tmp_path: Path
) -> None:
    path = tmp_path / "held.h5"
    shutil.copy(whole.path, path)
    context = multiprocessing.get_context("spawn")
    go, done = context.Event(), context.Event()
    other = context.Process(target=_hold, args=(str(path), go, done))
    other.start()
    assert done.wait(60)
    text = line(path, of=CountsRecord.open)
    go.set()
    other.join(60)
    assert "is being written by another program" in text
    assert len(CountsRecord.open(path)) == 6


def test_a_copy_that_broke_off_gives_its_whole_rows(whole: CountsRecord, tmp_path: Path) -> None:
    cut = tmp_path / "cut.h5"
    data = whole.path.read_bytes()
    cut.write_bytes(data[: int(0.6 * len(data))])
    record = CountsRecord.open(cut)
    assert 2 <= len(record) <= 4 and "bytes early" in record.cut
    assert np.array_equal(record.row(1)[0], whole.row(1)[0])
    assert "whole shots are used" in said(record)
    cut.write_bytes(data[:3000])
    assert "cut.h5" in line(cut, of=CountsRecord.open)
    cut.write_bytes(b"nothing of the kind")
    assert "is not an HDF5 file" in line(cut, of=CountsRecord.open)


def test_a_row_that_was_begun_is_named(whole: CountsRecord, tmp_path: Path) -> None:
    begun = tmp_path / "begun.h5"
    shutil.copy(whole.path, begun)
    with h5py.File(begun, "r+", libver="latest") as file:
        for name in ("shot", "clock_time"):
            file[name].resize(5, axis=0)
    record = CountsRecord.open(begun)
    assert len(record) == 5 and "row 5 was cut off" in record.cut


def test_order_repeats_gaps_and_clocks_are_named(whole: CountsRecord, tmp_path: Path) -> None:
    shuffled = rewritten(whole, tmp_path / "a.h5", [2, 0, 1, 3, 4, 5])
    assert "come before a shot" in said(shuffled)
    straight, other = convert(whole).record, convert(shuffled).record
    assert _differ(straight.samples_in_memory(), other.samples_in_memory()) < 1e-3
    copied = rewritten(whole, tmp_path / "b.h5", [0, 1, 1, 2, 3, 4, 5])
    assert "copies of earlier" in said(copied)
    assert convert(copied).record.protocol.averages.tolist() == [1] * 6
    missing = rewritten(whole, tmp_path / "c.h5", [0, 1, 3, 5])
    assert "2 of 6 shots were not measured: 2, 4" in said(missing)
    assert np.array_equal(
        convert(missing).record.protocol.nuclear_wavevector,
        whole.protocol.nuclear_wavevector[[0, 1, 3, 5]],
    )
    clock = np.array([0.0, 2.0, 1.0, 50.0, 52.0, 54.0])
    jumpy = rewritten(whole, tmp_path / "d.h5", list(range(6)), clock=clock)
    assert "runs back by 1 s at row 2" in said(jumpy) and "jumps by 49 s at row 3" in said(jumpy)


def test_a_shot_measured_again_is_averaged(tmp_path: Path) -> None:
    first, _ = counted(tmp_path / "1.h5", shots=4, seed=1)
    second, _ = counted(tmp_path / "2.h5", shots=4, seed=2)
    path = tmp_path / "both.h5"
    with CountsWriter(
        path, first.instrument, first.protocol, first.acquisition, first.description_json
    ) as writer:
        for row in range(4):
            writer.append(row, float(row), *first.row(row))
        writer.append(2, 9.0, *second.row(2))
    done = convert(CountsRecord.open(path))
    assert done.record.protocol.averages.tolist() == [1, 1, 2, 1]
    assert any("measured more often" in str(one) for one in done.findings)
    mean = (first_samples(first, 2) + first_samples(second, 2)) / 2
    # the channels' gains are measured anew on five rows: a hundredth or two
    assert _differ(done.record.samples_in_memory()[2], mean) < 0.03


def _differ(one: np.ndarray, other: np.ndarray) -> float:
    return float(np.linalg.norm(one - other) / np.linalg.norm(other))


def first_samples(record: CountsRecord, shot: int) -> np.ndarray:
    return convert(record).record.samples_in_memory()[shot]


def test_an_empty_reference_is_one_line(whole: CountsRecord, tmp_path: Path) -> None:
    path = tmp_path / "dark.h5"
    with CountsWriter(
        path, whole.instrument, whole.protocol, whole.acquisition, whole.description_json
    ) as writer:
        for row in range(3):
            signal, reference = whole.row(row)
            writer.append(row, float(row), signal, reference * (row != 1))
    text = line(CountsRecord.open(path), of=convert)
    assert "the reference of row 1 (shot 1) is zero throughout" in text


def test_another_runs_protocol_is_refused(whole: CountsRecord, tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    shutil.copy(whole.path, path)
    with h5py.File(path, "r+", libver="latest") as file:
        file["protocol/clock_time"][...] = np.arange(6) * 3.0
    assert "digests differ" in line(path, of=CountsRecord.open)
    with pytest.raises(InputError, match="another measurement"):
        writer = CountsWriter(whole.path, whole.instrument, protocol(7), whole.acquisition)
        writer.__enter__()


def test_counts_of_a_wrong_type_are_refused(whole: CountsRecord, tmp_path: Path) -> None:
    path = tmp_path / "float.h5"
    shutil.copy(whole.path, path)
    with h5py.File(path, "r+", libver="latest") as file:
        values = file["signal"][...].astype(np.float32)
        del file["signal"]
        file["signal"] = values
    assert "float32; counts are whole numbers" in line(path, of=CountsRecord.open)


def test_a_full_disk_is_one_line_and_keeps_what_was_written(
    whole: CountsRecord, tmp_path: Path
) -> None:
    code = f"""
from recon.counts import CountsRecord, CountsWriter
from recon.errors import InputError
whole = CountsRecord.open({str(whole.path)!r})
try:
    with CountsWriter("full.h5", whole.instrument, whole.protocol, whole.acquisition,
                      compression=None) as writer:
        for row in range(6):
            writer.append(row, 0.0, *whole.row(row))
except InputError as error:
    print(error)
"""
    ran = run_with_file_limit(700_000, code, tmp_path)
    assert "full.h5: cannot write" in ran.stdout, ran.stderr


def sidecar(folder: Path, body: str, kind: str = "camera") -> Path:
    apparatus = instrument(kind=kind)
    apparatus.to_toml(folder / "instrument.toml")
    protocol(6).save(folder / "protocol.h5")
    specimen().save(folder / "specimen.toml")
    setup: Acquisition = acquisition(apparatus)
    fields = setup.model_dump(exclude_none=True)
    tone = fields.pop("tone")
    lines = [f"{k} = {list(v) if isinstance(v, tuple) else v}" for k, v in fields.items()]
    lines += ["[acquisition.tone]", *(f"{k} = {v}" for k, v in tone.items())]
    text = 'instrument = "instrument.toml"\nprotocol = "protocol.h5"\nspecimen = "specimen.toml"\n'
    path = folder / "sidecar.toml"
    path.write_text(text + body + "\n[acquisition]\n" + "\n".join(lines))
    return path


def stacks(whole: CountsRecord) -> tuple[np.ndarray, np.ndarray]:
    pairs = [whole.row(row) for row in range(6)]
    return np.stack([s for s, _ in pairs]), np.stack([r for _, r in pairs])


def test_numpy_and_tiff_stacks_are_imported(whole: CountsRecord, tmp_path: Path) -> None:
    signal, reference = stacks(whole)
    np.save(tmp_path / "signal.npy", signal)
    tifffile.imwrite(tmp_path / "reference.tif", reference.reshape(-1, 16, 16))
    side = sidecar(tmp_path, 'signal = "signal.npy"\nreference = "reference.tif"')
    record = import_counts(side, tmp_path / "counts.h5").record
    assert np.array_equal(record.row(4)[0], signal[4])
    assert np.array_equal(record.row(4)[1], reference[4])
    assert record.specimen.names == ("water", "fat")
    again = line(side, tmp_path / "counts.h5", of=import_counts)
    assert "exists already" in again


def test_a_numpy_file_cut_off_mid_row_gives_whole_rows(whole: CountsRecord, tmp_path: Path) -> None:
    signal, reference = stacks(whole)
    np.save(tmp_path / "signal.npy", signal)
    np.save(tmp_path / "reference.npy", reference)
    data = (tmp_path / "signal.npy").read_bytes()
    (tmp_path / "signal.npy").write_bytes(data[: len(data) // 2 + 100])
    side = sidecar(tmp_path, 'signal = "signal.npy"\nreference = "reference.npy"')
    done = import_counts(side, tmp_path / "counts.h5")
    assert len(done.record) == 3
    assert any("cut off: 3 of 6 rows are whole" in remark for remark in done.remarks)


def test_mistakes_in_imports_are_one_line(
    whole: CountsRecord, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    signal, reference = stacks(whole)
    np.save(tmp_path / "signal.npy", signal.astype(np.float32))
    np.save(tmp_path / "reference.npy", reference)
    side = sidecar(tmp_path, 'signal = "signal.npy"\nreference = "reference.npy"')
    with pytest.raises(SystemExit) as left:
        main(["import", str(side), "-o", str(tmp_path / "x.h5")])
    assert left.value.code == 2
    said_there = capsys.readouterr().err
    assert "float32; counts are whole numbers" in said_there and said_there.count("\n") == 1
    assert not (tmp_path / "x.h5").exists()
    np.save(tmp_path / "signal.npy", signal[:, :50])
    assert "has shape (6, 50, 16, 16)" in line(side, tmp_path / "x.h5", of=import_counts)
    np.save(tmp_path / "signal.npy", signal.astype(np.int32) - 30_000)
    assert "does not fit" in line(side, tmp_path / "x.h5", of=import_counts)
    assert not (tmp_path / "x.h5").exists()
    body = 'signal = "signal.npy"\nreference = "reference.npy"\nprotocol_sha256 = "0123"'
    text = line(sidecar(tmp_path, body), tmp_path / "x.h5", of=import_counts)
    assert "belongs to another run" in text


def test_a_trace_of_one_detector_is_imported(tmp_path: Path) -> None:
    frames = SAMPLES * 16
    rng = np.random.default_rng(0)
    lines = ["shot,clock_time_s,signal,reference"]
    counts = rng.integers(1000, 1100, (2 * frames + 7, 2))
    for frame, (signal, reference) in enumerate(counts):
        shot = frame // frames
        lines.append(f"{shot},{2.0 * shot},{signal},{reference}")
    (tmp_path / "trace.csv").write_text("\n".join(lines))
    side = sidecar(tmp_path, 'trace = "trace.csv"', kind="one detector")
    done = import_counts(side, tmp_path / "counts.h5")
    assert len(done.record) == 2
    assert np.array_equal(done.record.row(1)[0].ravel(), counts[frames : 2 * frames, 0])
    assert "7 frames of a shot that was cut off" in done.remarks[0]
