import errno
import tracemalloc
from dataclasses import replace

import h5py
import numpy as np
import pytest

import recon.record
from recon.record import Record, RecordWriter
from tests.descriptions import GRID, instrument, line, protocol, run_with_file_limit, specimen

NOISE = 3e-9


@pytest.fixture
def record(tmp_path):
    rng = np.random.default_rng(5)
    samples = rng.standard_normal((6, 3, 4, 8)) + 1j * rng.standard_normal((6, 3, 4, 8))
    return Record.from_arrays(
        instrument(tmp_path),
        protocol(),
        samples.astype(np.complex64),
        specimen().description_json(),
        noise_sd=NOISE,
    )


def writer(path, record):
    return RecordWriter(path, record.instrument, record.protocol, record.description_json, NOISE)


def names(folder):
    return sorted(path.name for path in folder.iterdir() if path.suffix != ".toml")


def test_file_carries_everything(tmp_path, record):
    record.save(tmp_path / "one.h5")
    again = Record.open(tmp_path / "one.h5")
    assert again.instrument == record.instrument
    assert again.protocol.digest() == record.protocol.digest()
    assert again.specimen.grid == GRID
    assert again.specimen.names == ("lactate", "water")
    assert again.noise_sd == NOISE
    assert again.shape == record.shape == (6, 3, 4, 8)
    assert again.view == record.instrument.view
    np.testing.assert_array_equal(again.samples_in_memory(), record.samples_in_memory())


def test_weights_are_averages_over_variance(record):
    np.testing.assert_allclose(record.weights, record.protocol.averages / NOISE**2)


@pytest.mark.parametrize("batch", [None, 1, 4, 6, 100])
def test_batches_cover_the_record_in_order(tmp_path, record, batch):
    record.save(tmp_path / "one.h5")
    whole = record.samples_in_memory()
    for source in (record, Record.open(tmp_path / "one.h5")):
        seen = []
        for where, block in source.shots(batch):
            assert block.dtype == np.complex64
            np.testing.assert_array_equal(block, whole[where])
            seen += range(6)[where]
        assert seen == list(range(6))


def test_chunked_samples_are_read_as_well(tmp_path, record):
    record.save(tmp_path / "one.h5")
    whole = record.samples_in_memory()
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        del file["samples"]
        file.create_dataset("samples", data=whole, chunks=(1, 3, 4, 8), compression="gzip")
    np.testing.assert_array_equal(Record.open(tmp_path / "one.h5").samples_in_memory(), whole)


def test_appending_in_pieces(tmp_path, record):
    whole = record.samples_in_memory()
    with writer(tmp_path / "one.h5", record) as file:
        for start in (0, 1, 4):
            file.append(whole[start : {0: 1, 1: 4, 4: 6}[start]])
            assert names(tmp_path) != ["one.h5"]
    assert names(tmp_path) == ["one.h5"]
    np.testing.assert_array_equal(Record.open(tmp_path / "one.h5").samples_in_memory(), whole)


def test_one_detector(tmp_path, record):
    detector = {"camera": None, "one_detector": {"field_of_view_um": [32, 16]}}
    apparatus = type(record.instrument)(**record.instrument.model_dump() | detector)
    samples = np.ones((6, 3, 1, 1), np.complex64)
    Record.from_arrays(apparatus, record.protocol, samples, noise_sd=NOISE).save(tmp_path / "a.h5")
    again = Record.open(tmp_path / "a.h5")
    assert again.shape == (6, 3, 1, 1)
    assert "no description" in line(of=lambda: again.specimen)


def test_memory_of_a_pass_does_not_grow_with_the_record(tmp_path, record, monkeypatch):
    monkeypatch.setattr(recon.record, "BATCH_BYTES", 50_000)
    table = protocol(2000)
    with RecordWriter(tmp_path / "one.h5", record.instrument, table, "", NOISE) as file:
        for _ in range(20):
            file.append(np.ones((100, 3, 4, 8), np.complex64))
    big = Record.open(tmp_path / "one.h5")
    tracemalloc.start()
    for _ in big.shots():
        pass
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert big.nbytes == 2000 * 3 * 4 * 8 * 8
    assert peak < 0.25 * big.nbytes


@pytest.mark.parametrize("value", [np.nan, np.inf, -1j * np.inf])
def test_samples_that_are_not_finite_name_the_shot(tmp_path, record, value):
    record.save(tmp_path / "one.h5")
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        file["samples"][4, 2, 1, 7] = value
    for batch in (1, 3, None):
        said = line(of=lambda batch=batch: list(Record.open(tmp_path / "one.h5").shots(batch)))
        assert "shot 4 has a sample that is not finite" in said
    samples = np.array(record.samples_in_memory())
    samples[5, 0, 0, 0] = value
    held = Record.from_arrays(record.instrument, record.protocol, samples, noise_sd=NOISE)
    assert "shot 5 has" in line(of=held.samples_in_memory)
    assert "shot 5 has" in line(tmp_path / "two.h5", of=held.save)
    assert names(tmp_path) == ["one.h5"]


def test_very_large_samples_are_not_taken_for_infinite(record):
    samples = np.full(record.shape, 1e30, np.complex64)
    held = Record.from_arrays(record.instrument, record.protocol, samples, noise_sd=NOISE)
    assert held.samples_in_memory() is held.source


def test_truncated_file(tmp_path, record):
    record.save(tmp_path / "one.h5")
    whole = (tmp_path / "one.h5").read_bytes()
    for size in (len(whole) - 1, len(whole) // 2, 3000):
        (tmp_path / "one.h5").write_bytes(whole[:size])
        assert "truncated" in line(tmp_path / "one.h5", of=Record.open)
    for size in (0, 5):
        (tmp_path / "one.h5").write_bytes(whole[:size])
        assert "not an HDF5 file" in line(tmp_path / "one.h5", of=Record.open)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b'"temperature_C"', b'"temperature_\xff"', "cannot be read"),
        (b'"temperature_C"', b'"temperature_K"', "did you mean 'temperature_C'?"),
        (b'{"temperature_C"', b'["temperature_C"', "not valid JSON"),
        (b'"thickness_um":5', b'"thickness_um":0', "thickness_um: must be greater than 0"),
    ],
)
def test_damaged_file_says_one_line(tmp_path, record, old, new, words):
    record.save(tmp_path / "one.h5")
    whole = (tmp_path / "one.h5").read_bytes()
    assert old in whole
    (tmp_path / "one.h5").write_bytes(whole.replace(old, new))
    said = line(tmp_path / "one.h5", of=Record.open)
    assert words in said
    assert said.startswith(str(tmp_path))


def test_another_number_of_shots(tmp_path, record):
    samples = np.ones((5, 3, 4, 8), np.complex64)
    said = line(
        of=lambda: Record.from_arrays(record.instrument, record.protocol, samples, noise_sd=NOISE)
    )
    assert "samples of 5 shots, the protocol has 6" in said
    record.save(tmp_path / "one.h5")
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        del file["samples"]
        file["samples"] = samples
    said = line(tmp_path / "one.h5", of=Record.open)
    assert said == f"{tmp_path / 'one.h5'}: samples of 5 shots, the protocol has 6"


@pytest.mark.parametrize(
    ("samples", "words"),
    [
        (np.ones((6, 2, 4, 8), np.complex64), "samples of 2 times, the protocol has 3"),
        (np.ones((6, 3, 8, 4), np.complex64), "(8, 4) channels (y, x), the detector has (4, 8)"),
        (np.ones((6, 3, 32), np.complex64), "not complex64 with four axes"),
        (np.ones((6, 3, 4, 8), np.complex128), "not complex64 with four axes"),
        (None, "dataset 'samples' is missing"),
    ],
)
def test_samples_that_do_not_fit(tmp_path, record, samples, words):
    record.save(tmp_path / "one.h5")
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        del file["samples"]
        if samples is not None:
            file["samples"] = samples
    assert words in line(tmp_path / "one.h5", of=Record.open)


def test_wrong_kind_and_bad_noise(tmp_path, record):
    record.protocol.save(tmp_path / "table.h5")
    assert "holds a protocol, not a record" in line(tmp_path / "table.h5", of=Record.open)
    record.save(tmp_path / "one.h5")
    with h5py.File(tmp_path / "one.h5", "r+") as file:
        file.attrs["noise_sd_T"] = np.nan
    assert "noise_sd nan T must be positive" in line(tmp_path / "one.h5", of=Record.open)


def write(path, record, blocks):
    with writer(path, record) as file:
        for block in blocks:
            file.append(block)


def test_writer_refuses_too_few_too_many_and_misshapen_shots(tmp_path, record):
    whole = record.samples_in_memory()
    (tmp_path / "one.h5").write_text("old")
    for blocks, words in [
        ([whole[:4]], "samples of 4 shots, the protocol has 6; append every shot"),
        ([whole, whole[:1]], "samples of 7 shots, the protocol has 6"),
        ([whole[:, :2]], "samples per shot have shape (2, 4, 8), not (3, 4, 8)"),
    ]:
        assert words in line(tmp_path / "one.h5", record, blocks, of=write)
    assert names(tmp_path) == ["one.h5"]
    assert (tmp_path / "one.h5").read_text() == "old"


def test_any_failure_removes_the_partial_file(tmp_path, record):
    (tmp_path / "one.h5").write_text("old")
    with pytest.raises(KeyboardInterrupt), writer(tmp_path / "one.h5", record) as file:
        file.append(record.samples_in_memory()[:3])
        raise KeyboardInterrupt
    assert names(tmp_path) == ["one.h5"]
    assert (tmp_path / "one.h5").read_text() == "old"


@pytest.mark.parametrize("place", ["write_direct", "create_dataset"])
def test_full_disk_by_the_library(tmp_path, record, monkeypatch, place):
    (tmp_path / "one.h5").write_text("old")

    def full(*arguments, **options):
        raise OSError(errno.ENOSPC, "No space left on device")

    owner = h5py.Dataset if place == "write_direct" else h5py.Group
    monkeypatch.setattr(owner, place, full)
    said = line(tmp_path / "one.h5", of=record.save)
    assert "one.h5: cannot write (No space left on device)" in said
    assert names(tmp_path) == ["one.h5"]
    assert (tmp_path / "one.h5").read_text() == "old"


@pytest.mark.parametrize("limit", [100, 3000, 8000])
def test_disk_really_full(tmp_path, record, limit):
    """The library would crash the program when it fails to write; ours must leave cleanly."""
    record.save(tmp_path / "old.h5")
    before = (tmp_path / "old.h5").read_bytes()
    assert limit < len(before)
    code = (
        "from recon.record import Record\n"
        "from recon.errors import InputError\n"
        "try: Record.open('old.h5').save('old.h5')\n"
        "except InputError as error: print(error)\n"
    )
    done = run_with_file_limit(limit, code, tmp_path)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("old.h5: cannot write (File too large)")
    assert not done.stderr
    assert names(tmp_path) == ["old.h5"]
    assert (tmp_path / "old.h5").read_bytes() == before


def test_folder_that_cannot_be_written(tmp_path, record):
    (tmp_path / "file").write_text("a file where a folder is wanted")
    said = line(tmp_path / "file" / "one.h5", of=record.save)
    assert "cannot write" in said


def test_record_replaced_by_another_between_passes(tmp_path, record):
    record.save(tmp_path / "one.h5")
    opened = Record.open(tmp_path / "one.h5")
    short = replace(record, protocol=record.protocol.subset([0, 1]), source=record.source[:2])
    short.save(tmp_path / "one.h5")
    assert "samples of 2 shots, the protocol has 6" in line(of=opened.samples_in_memory)
