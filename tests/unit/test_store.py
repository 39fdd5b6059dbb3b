"""HDF5 files: what is written comes back to the bit, opens elsewhere, and appears whole or not."""

from __future__ import annotations

import dataclasses
import hashlib
import importlib.metadata
import json
import os
import subprocess
import sys
import time
import tracemalloc
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import xarray

import atomic_tables
import levelnet
from levelnet import constants
from levelnet.atomic.levels import LevelSet
from levelnet.errors import FileFormatError, InputError, Outcome
from levelnet.history.result import History, SpeciesPopulations
from levelnet.store import (
    LAYOUT_VERSION,
    check_output,
    describe_layout,
    layout,
    read,
    read_attributes,
    whole_file,
    write,
)
from levelnet.store.digest import content_digest
from levelnet.store.schema import Content, Stored
from tests.invented_history import history_with_field, invented_history
from tests.same_records import assert_same

ROOT = Path(__file__).resolve().parents[2]
GROUPS = ["history", "hydrogen", "lines", "channels", "milestones", "diagnostics", "notes", "field"]


def leaves(record: Any, name: str = "") -> Iterator[tuple[str, Any]]:
    """Every array and plain value inside a record, by its path; a setup counts as one value."""
    if dataclasses.is_dataclass(record) and name != "setup":
        for one in dataclasses.fields(record):
            path = f"{name}.{one.name}".strip(".")
            yield from leaves(getattr(record, one.name), path)
    elif isinstance(record, tuple) and record and dataclasses.is_dataclass(record[0]):
        for number, one in enumerate(record):
            yield from leaves(one, f"{name}.{number}")
    else:
        yield name, record


def bits(value: Any) -> Any:
    """A form of a value that is equal only where every bit is, NaN and the sign of 0 included."""
    if isinstance(value, float):
        value = np.float64(value)
    if isinstance(value, np.ndarray | np.float64):
        return (value.dtype.str, value.shape, value.tobytes())
    return (type(value), value)


def names_in(folder: Path) -> list[str]:
    return sorted(entry.name for entry in folder.iterdir())


@pytest.fixture(scope="module")
def history() -> History:
    return history_with_field()


@pytest.fixture(scope="module")
def stored(history: History, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("store") / "history.h5"
    write(history, path)
    return path


# ---- round trip


def test_comes_back_to_the_bit(history: History, stored: Path) -> None:
    before, after = dict(leaves(history)), dict(leaves(read(stored)))
    assert len(before) == 68
    assert {path: bits(value) for path, value in after.items()} == {
        path: bits(value) for path, value in before.items()
    }
    assert np.isnan(after["milestones.visibility_width"])  # the invented history has NaN to carry


@pytest.mark.parametrize("value", [-0.0, 5e-324, np.inf, -np.inf, 1.7976931348623157e308])
def test_extreme_numbers_come_back(value: float, history: History, tmp_path: Path) -> None:
    optical_depth = history.optical_depth.copy()
    optical_depth[3] = value
    diagnostics = dataclasses.replace(history.diagnostics, conservation_error=value)
    given = dataclasses.replace(history, optical_depth=optical_depth, diagnostics=diagnostics)
    write(given, tmp_path / "h.h5")
    got = read(tmp_path / "h.h5")
    assert bits(got.optical_depth) == bits(optical_depth)
    assert bits(got.diagnostics.conservation_error) == bits(value)


def test_payload_of_a_nan_comes_back(history: History, tmp_path: Path) -> None:
    odd = np.frombuffer(b"\x01\x02\x03\x04\x05\x06\xf8\xff")[0]
    visibility = history.visibility.copy()
    visibility[5] = odd
    write(dataclasses.replace(history, visibility=visibility), tmp_path / "h.h5")
    assert read(tmp_path / "h.h5").visibility[5].tobytes() == odd.tobytes()


def test_nothing_to_list(tmp_path: Path) -> None:
    # Closed lines: no line exchanges photons; and a run may have nothing to note.
    given = invented_history(lines=(), notes=())
    write(given, tmp_path / "h.h5")
    got = read(tmp_path / "h.h5")
    assert got.lines.names == got.notes == ()
    assert got.lines.optical_depth.shape == (12, 0)
    with xarray.open_dataset(tmp_path / "h.h5", engine="h5netcdf", group="lines") as data:
        assert dict(data.sizes) == {"redshift": 12, "line": 0}


@pytest.mark.parametrize("outcome", list(Outcome))
def test_every_outcome_comes_back(outcome: Outcome, history: History, tmp_path: Path) -> None:
    write(dataclasses.replace(history, outcome=outcome), tmp_path / "h.h5")
    assert read(tmp_path / "h.h5").outcome is outcome
    assert read_attributes(tmp_path / "h.h5")["outcome_text"] == outcome.value


def test_several_species(history: History, tmp_path: Path) -> None:
    hydrogen = history.species[0]
    first = slice(0, 6)
    levels = LevelSet(
        **{f.name: getattr(hydrogen.levels, f.name)[first] for f in dataclasses.fields(LevelSet)}
    )
    ion = SpeciesPopulations(
        "He II", levels, hydrogen.population[:, first], hydrogen.log_departure[:, first]
    )
    write(dataclasses.replace(history, species=(hydrogen, ion)), tmp_path / "h.h5")
    got = read(tmp_path / "h.h5")
    assert [one.name for one in got.species] == ["H I", "He II"]
    assert bits(got.populations("He II")) == bits(ion.population)
    with h5py.File(tmp_path / "h.h5") as file:
        assert sorted(file) == sorted([*GROUPS, "helium_ion"])


def test_unknown_species_is_refused(history: History, tmp_path: Path) -> None:
    strange = dataclasses.replace(history.species[0], name="Li I")
    with pytest.raises(InputError, match="Li I"):
        write(dataclasses.replace(history, species=(strange,)), tmp_path / "h.h5")
    assert names_in(tmp_path) == []


def test_long_setup_needs_no_other_place(tmp_path: Path) -> None:
    # 5000 output redshifts make more TOML than the 64 kB that HDF5 keeps beside an object.
    given = invented_history()
    redshifts = tuple(float(z) for z in np.linspace(22.0, 1699.0, 5000) + 1.0 / 3.0)
    grid = dataclasses.replace(given.setup.grid, redshifts=redshifts)
    given = dataclasses.replace(given, setup=dataclasses.replace(given.setup, grid=grid))
    assert len(given.setup.to_toml()) > 65536
    write(given, tmp_path / "h.h5")
    assert read(tmp_path / "h.h5").setup == given.setup


def test_big_arrays_in_several_chunks(tmp_path: Path) -> None:
    # 70 x 2145 is more than one chunk both ways.
    given = invented_history(70)
    hydrogen = given.species[0]
    repeat = 143
    levels = LevelSet(
        **{
            f.name: np.tile(getattr(hydrogen.levels, f.name), repeat)
            for f in dataclasses.fields(LevelSet)
        }
    )
    wide = np.tile(hydrogen.population, repeat) * np.arange(1.0, 2146.0)
    many = SpeciesPopulations("H I", levels, wide, -wide)
    write(dataclasses.replace(given, species=(many,)), tmp_path / "h.h5")
    assert bits(read(tmp_path / "h.h5").populations("H I")) == bits(wide)


def test_field_comes_back_or_is_not_there(history: History, tmp_path: Path) -> None:
    write(history, tmp_path / "with.h5")
    assert_same(read(tmp_path / "with.h5").field, history.field)
    write(invented_history(), tmp_path / "without.h5")
    assert read(tmp_path / "without.h5").field is None
    with h5py.File(tmp_path / "without.h5") as file:
        assert "field" not in file


# ---- layout


def test_layout_has_every_field_of_the_records(history: History) -> None:
    listed = {
        one.field
        for group in layout.groups_of(("H I",), with_field=True)
        for one in group.variables
        if one.field
    }
    fields = {path.replace("species.0.", "species.") for path, _ in leaves(history)}
    # "helium" is a part of its own, which a history of hydrogen lacks.
    assert listed == fields - {"setup", "outcome", "species.name", "helium"}


def test_file_is_as_the_layout_says(stored: Path) -> None:
    with h5py.File(stored) as file:
        assert sorted(file) == sorted(GROUPS)
        assert set(file.attrs) == set(layout.ROOT_ATTRIBUTES)
        for group in layout.groups_of(("H I",), with_field=True):
            assert sorted(file[group.name]) == sorted(one.name for one in group.variables)
            for one in group.variables:
                dataset = file[group.name][one.name]
                assert dataset.attrs["long_name"] == one.long_name
                assert dataset.dims is not None
                assert dataset.ndim == len(one.dimensions)
                if one.kind != "text":
                    assert dataset.attrs["units"] == one.units
                    assert dataset.dtype == np.dtype(one.kind)
                if dataset.ndim and one.kind != "text":
                    assert (dataset.compression, dataset.shuffle) == ("gzip", True)
                    assert dataset.fletcher32


def test_names_of_the_species_group(stored: Path) -> None:
    # The names that programs outside rely on.
    with h5py.File(stored) as file:
        assert set(file["hydrogen"]) == {
            "redshift", "level", "n", "l", "statistical_weight", "energy", "ionization_energy",
            "population", "log_departure",
        }  # fmt: skip


def test_units_can_be_read() -> None:
    # Each was parsed by UDUNITS-2 (in cf-units 3.3.1), which refuses "Mpc-1".
    readable = {"1", "K", "cm-3", "s-1", "s", "megaparsec-1", "eV"}
    used = {
        one.units
        for group in layout.groups_of(("H I",), with_field=True)
        for one in group.variables
        if one.kind != "text"
    }
    assert used == readable


def test_description_names_everything() -> None:
    text = describe_layout()
    for group in layout.groups_of(("H I",), with_field=True):
        assert f"group {group.name}: " in text
        for one in group.variables:
            assert f" {one.name}" in text
            assert one.long_name in text
    for name in layout.ROOT_ATTRIBUTES:
        assert f"\n  {name}: " in text
    assert text.isascii()


@pytest.mark.parametrize(
    "group", layout.groups_of(("H I",), with_field=True), ids=lambda group: group.name
)
def test_each_group_opens_alone_in_xarray(
    group: layout.Group, history: History, stored: Path
) -> None:
    with xarray.open_dataset(stored, engine="h5netcdf", group=group.name) as data:
        for one in group.variables:
            assert data[one.name].dims == one.dimensions
            assert data[one.name].attrs.get("units") == (None if one.kind == "text" else one.units)
            assert data[one.name].attrs["long_name"] == one.long_name
        for dimension in data.sizes:
            assert dimension in data.coords
        if "redshift" in data.sizes:
            own = history.field if group is layout.FIELD else history
            assert own is not None
            assert bits(data["redshift"].to_numpy()) == bits(own.redshift)


def test_xarray_gives_names_and_selects_by_them(history: History, stored: Path) -> None:
    with xarray.open_dataset(stored, engine="h5netcdf", group="lines") as data:
        assert data["line"].to_numpy().tolist() == ["2p-1s", "3p-1s"]
        depth = data["optical_depth"].sel(line="3p-1s").to_numpy()
        assert bits(depth) == bits(history.lines.optical_depth[:, 1])
    with xarray.open_dataset(stored, engine="h5netcdf", group="channels") as data:
        assert data["channel"].to_numpy().tolist() == ["2s-1s", "2p-1s", "3p-1s"]
        assert bits(data["share"].to_numpy()) == bits(history.channels.share)
    with xarray.open_dataset(stored, engine="h5netcdf", group="hydrogen") as data:
        assert {"n", "l", "level", "redshift"} == set(data.coords)
        one = data["population"].where((data["n"] == 3) & (data["l"] == 1), drop=True)
        expected = history.populations("H I")[:, history.levels("H I").index(3, 1)]
        assert bits(one.to_numpy()[:, 0]) == bits(expected)
    with xarray.open_dataset(stored, engine="h5netcdf", group="field") as data:
        field = history.field
        assert field is not None
        one = data["log_distortion"].sel(redshift=1000.0).sel(photon_energy=10.2, method="nearest")
        nearest = np.argmin(np.abs(field.photon_energy_ev - 10.2))
        assert float(one) == field.log_distortion[2, nearest]
    with xarray.open_dataset(stored, engine="h5netcdf", group="notes") as data:
        assert tuple(data["note"].to_numpy().tolist()) == history.notes
    with xarray.open_dataset(stored, engine="h5netcdf", group="milestones") as data:
        assert float(data["half_ionized_redshift"]) == 1274.3
    with xarray.open_dataset(stored, engine="h5netcdf") as data:
        assert data.attrs["setup"] == history.setup.to_toml()


# ---- provenance


def test_file_says_what_made_it(history: History, stored: Path) -> None:
    said = read_attributes(stored)
    for name in ("numpy", "scipy", "numba", "h5py"):
        assert said[f"{name}_version"] == importlib.metadata.version(name)
    assert said["levelnet_version"] == levelnet.__version__
    assert said["codata_edition"] == constants.CODATA_EDITION
    assert said["layout_version"] == LAYOUT_VERSION
    assert said["setup"] == history.setup.to_toml()
    assert said["setup_digest"] == history.setup.digest
    assert said["outcome"] == "CONVERGED"


def test_table_checksums_are_those_of_the_files(stored: Path) -> None:
    text = str(read_attributes(stored)["table_checksums"])
    entries = dict(line.split(" ") for line in text.splitlines())
    assert entries
    for name, checksum in entries.items():
        content = atomic_tables.path(f"{name}.csv").read_bytes()
        assert hashlib.sha256(content).hexdigest() == checksum


def test_damaged_catalogue_does_not_cost_the_result(
    history: History, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(levelnet.tables, "_CATALOGUE", "missing.toml")
    write(history, tmp_path / "h.h5")
    assert str(read_attributes(tmp_path / "h.h5")["table_checksums"]).startswith("unreadable: ")


def test_no_time_and_no_machine(history: History, stored: Path, tmp_path: Path) -> None:
    time.sleep(1.1)  # HDF5 keeps times in whole seconds
    write(history, tmp_path / "again.h5")
    write(read(stored), tmp_path / "copy.h5")
    program = (
        "import sys; from levelnet.store import write\n"
        "from tests.invented_history import history_with_field\n"
        "write(history_with_field(), sys.argv[1])"
    )
    run_python(program, str(tmp_path / "other_process.h5"), hash_seed="77")
    first = stored.read_bytes()
    for name in ("again", "copy", "other_process"):
        assert (tmp_path / f"{name}.h5").read_bytes() == first, name
    assert str(tmp_path).encode() not in first
    assert os.uname().nodename.encode() not in first or len(os.uname().nodename) < 5


def run_python(
    program: str, *arguments: str, hash_seed: str = "0"
) -> subprocess.CompletedProcess[str]:
    paths = [str(ROOT), *os.environ.get("PYTHONPATH", "").split(os.pathsep)]
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(paths), "PYTHONHASHSEED": hash_seed}
    done = subprocess.run(
        [sys.executable, "-c", program, *arguments],
        env=environment, capture_output=True, text=True, timeout=120, check=False,
    )  # fmt: skip
    assert done.returncode <= 0, done.stderr  # below 0: killed, where a test wants it
    return done


def test_h5py_is_loaded_only_for_a_file() -> None:
    done = run_python("import sys, levelnet.store; print('h5py' in sys.modules)")
    assert done.stdout == "False\n"


# ---- whole or not at all


def test_existing_file_is_kept(history: History, tmp_path: Path) -> None:
    path = tmp_path / "h.h5"
    path.write_bytes(b"precious")
    with pytest.raises(InputError, match=r"h\.h5: already exists; use --force"):
        write(history, path)
    assert path.read_bytes() == b"precious"
    assert names_in(tmp_path) == ["h.h5"]
    write(history, path, force=True)
    assert read(path).outcome is Outcome.CONVERGED
    assert names_in(tmp_path) == ["h.h5"]


def test_file_that_appears_meanwhile_is_kept(tmp_path: Path) -> None:
    path = tmp_path / "h.h5"
    with pytest.raises(InputError, match="already exists"), whole_file(path) as raw:
        raw.write(b"ours")
        path.write_bytes(b"theirs")
    assert path.read_bytes() == b"theirs"
    assert names_in(tmp_path) == ["h.h5"]


def test_places_that_cannot_take_a_file(history: History, tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "folder").mkdir()
    (tmp_path / "plain").write_text("")
    cases = {
        tmp_path / "missing" / "h.h5": "does not exist",
        tmp_path / "plain" / "h.h5": "does not exist|Not a directory",
        tmp_path / "folder": "not a plain file",
        tmp_path / "pipe": "not a plain file",
        tmp_path / ("n" * 300): "too long",
    }
    for path, reason in cases.items():
        with pytest.raises(InputError, match=reason) as caught:
            write(history, path, force=True)
        assert str(path) in str(caught.value)
        assert "\n" not in str(caught.value)
    assert names_in(tmp_path) == ["folder", "pipe", "plain"]


def test_unwritable_folder(
    history: History, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    # Permissions do not bind the administrator, so the answer of the system is set by hand.
    monkeypatch.setattr(os, "access", lambda *_: False)
    with pytest.raises(InputError, match="no permission"):
        check_output(tmp_path / "h.h5")
    with pytest.raises(InputError, match="no permission"):
        write(history, tmp_path / "h.h5")


def test_link_survives(history: History, tmp_path: Path) -> None:
    (tmp_path / "disk").mkdir()
    link = tmp_path / "h.h5"
    link.symlink_to(tmp_path / "disk" / "real.h5")
    write(history, link)
    write(history, link, force=True)
    assert link.is_symlink()
    assert names_in(tmp_path / "disk") == ["real.h5"]


def test_permissions_of_a_replaced_file_are_kept(history: History, tmp_path: Path) -> None:
    path = tmp_path / "h.h5"
    path.touch(mode=0o600)
    write(history, path, force=True)
    assert path.stat().st_mode & 0o777 == 0o600


LIMITED = """
import json, resource, sys
from levelnet.errors import LevelnetError
from levelnet.store import write
from tests.invented_history import history_with_field
history, said = history_with_field(), []
for limit in map(int, sys.argv[2:]):
    # The system refuses to let a file grow beyond the limit, as a full disk does.
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))
    try:
        write(history, sys.argv[1], force=True)
    except LevelnetError as error:
        said.append(str(error))
    resource.setrlimit(resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
print(json.dumps(said))
"""


def test_disk_that_fills_up(stored: Path, tmp_path: Path) -> None:
    path = tmp_path / "h.h5"
    path.write_bytes(b"previous")
    length = stored.stat().st_size
    limits = [0, 1, 500, 2048, 5000, length // 3, length // 2, length - 100, length - 1]
    done = run_python(LIMITED, str(path), *map(str, limits))
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""  # HDF5 has nothing left to complain of when Python ends
    said = json.loads(done.stdout)
    assert len(said) == len(limits)
    assert set(said) == {f"{path}: cannot be written: File too large"}
    assert path.read_bytes() == b"previous"
    assert names_in(tmp_path) == ["h.h5"]


@pytest.mark.parametrize("error", [KeyboardInterrupt(), OSError(28, "No space left on device")])
@pytest.mark.parametrize("place", ["fsync", "replace", "write"])
def test_failure_at_any_stage_leaves_nothing(
    place: str,
    error: BaseException,
    history: History,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    path = tmp_path / "h.h5"
    path.write_bytes(b"previous")

    def fail(*_: object) -> None:
        raise error

    if place == "write":
        calls = []

        class Raw:
            """A file that fails in the middle."""

            def __init__(self, raw: Any) -> None:
                self.raw = raw

            def write(self, data: Any) -> int:
                calls.append(len(data))
                return fail() if len(calls) > 5 else self.raw.write(data)

            def __getattr__(self, name: str) -> Any:
                return getattr(self.raw, name)

        from levelnet.store import write as write_function  # the name of the module is taken

        module = sys.modules[write_function.__module__]
        sink = module._Sink
        monkeypatch.setattr(module, "_Sink", lambda raw: sink(Raw(raw)))
    else:
        monkeypatch.setattr(os, place, fail)
    expected = InputError if isinstance(error, OSError) else KeyboardInterrupt
    with pytest.raises(expected) as caught:
        write(history, path, force=True)
    if expected is InputError:
        assert str(caught.value) == f"{path}: cannot be written: No space left on device"
    assert path.read_bytes() == b"previous"
    assert names_in(tmp_path) == ["h.h5"]


KILLED = """
import os, signal, sys
from levelnet.store import write
from tests.invented_history import history_with_field
os.fsync = lambda _: os.kill(os.getpid(), signal.SIGKILL)
write(history_with_field(), sys.argv[1], force=True)
"""


def test_killed_writer_leaves_the_previous_file(
    history: History, stored: Path, tmp_path: Path
) -> None:
    path = tmp_path / "h.h5"
    path.write_bytes(stored.read_bytes())
    assert run_python(KILLED, str(path)).returncode < 0
    left = [name for name in names_in(tmp_path) if name.endswith(".part")]
    assert len(left) == 1
    assert read(path).outcome is Outcome.CONVERGED
    # Not ours to remove: of a process that lives, of another target, of another host.
    living = left[0].replace(left[0].split("-")[1], str(os.getppid()))
    others = [living, left[0].replace("h.h5", "g.h5"), left[0].replace("h.h5.", "h.h5.0")]
    for name in others:
        (tmp_path / name).touch()
    write(history, path, force=True)
    assert names_in(tmp_path) == sorted([*others, "h.h5"])


# ---- files that are no histories


def refuse(path: Path) -> str:
    """The message of the refusal, which is one line and names the file."""
    with pytest.raises(FileFormatError) as caught:
        read(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: ")
    assert "\n" not in message
    return message


def test_what_is_no_file(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")  # opening it would wait for ever
    assert "No such file" in refuse(tmp_path / "missing.h5")
    assert "Is a directory" in refuse(tmp_path)
    assert "not a plain file" in refuse(tmp_path / "pipe")


@pytest.mark.parametrize("content", [b"", b"\x89HDF", b"redshift,x\n1,2\n", bytes(100_000)])
def test_what_is_not_hdf5(content: bytes, tmp_path: Path) -> None:
    (tmp_path / "h.h5").write_bytes(content)
    assert "not an HDF5 file" in refuse(tmp_path / "h.h5")


def test_foreign_hdf5(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "h.h5", "w") as file:
        file["history/redshift"] = np.arange(3.0)
    assert "not a file of levelnet" in refuse(tmp_path / "h.h5")


def test_file_changed_by_another_program(stored: Path, tmp_path: Path) -> None:
    path = tmp_path / "h.h5"
    path.write_bytes(stored.read_bytes())
    with h5py.File(path, "r+") as file:
        file.attrs["comment"] = "mine"
    assert "changed by another program" in refuse(path) or "damaged" in refuse(path)


def test_reads_while_xarray_has_it_open(stored: Path) -> None:
    xarray = pytest.importorskip("xarray")
    with xarray.open_dataset(stored, engine="h5netcdf", group="history") as held:
        assert read(stored).redshift[0] == float(held["redshift"][0])


def test_digest_copies_no_array() -> None:
    numbers = {f"a/{kind}": np.zeros((1000, 1000), kind) for kind in ("<f8", "<i8", "|b1")}
    content = Content(variables={k: Stored(("x", "y"), {}, v) for k, v in numbers.items()})
    content_digest(content)
    tracemalloc.start()
    content_digest(content)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 100_000  # of 8 million bytes an array
