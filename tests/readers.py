"""Opens the archive of a run folder with h5py, xarray (both engines) and netCDF4, and compares every sample, label,
unit and number with the run's journal, which is read here from docs/archive.md alone, without Darkline.

Usage: python -W error tests/readers.py RUN_FOLDER
"""

import json
import struct
import sys
from pathlib import Path

import h5py
import netCDF4
import numpy as np
import xarray

# --- An independent reader of the journal, after docs/archive.md -----------------------------------------------


def crc32c_table():
    table = []
    for byte in range(256):
        for _ in range(8):
            byte = byte >> 1 ^ (0x82F63B78 if byte & 1 else 0)
        table.append(byte)
    return table


TABLE = crc32c_table()


def crc32c(data):
    crc = 0xFFFFFFFF
    for byte in data:
        crc = TABLE[(crc ^ byte) & 0xFF] ^ crc >> 8
    return crc ^ 0xFFFFFFFF


def journal(path, check_long=False):
    """Yields (entry, acquisitions or None) of every whole record; stops at a torn tail."""
    data = path.read_bytes()
    assert data[:8] == b"\x89DKLJ\r\n\x1a", "not a journal"
    version, start = struct.unpack_from("<HH", data, 8)
    assert version == 1 and crc32c(data[:28]) == struct.unpack_from("<I", data, 28)[0]
    at, expected = start, 0
    while at + 28 <= len(data):
        marker, kind, flags, number, length, header_sum = struct.unpack_from("<4sHHQII", data, at)
        assert marker == b"DKR\x1e" and header_sum == crc32c(data[at : at + 20])
        assert number == expected and flags == 0
        end = at + 24 + length
        if end + 4 > len(data):
            return
        if length < 20000 or check_long:
            assert crc32c(data[at:end]) == struct.unpack_from("<I", data, end)[0]
        payload = data[at + 24 : end]
        if kind == 1:
            yield json.loads(payload), None
        else:
            (size,) = struct.unpack_from("<I", payload)
            yield json.loads(payload[4 : 4 + size]), list(acquisitions(payload, 4 + size))
        at, expected = end + 4, expected + 1


def acquisitions(payload, at):
    (count,) = struct.unpack_from("<I", payload, at)
    at += 4
    for _ in range(count):
        fields = struct.unpack_from("<Qq5d3IHBB", payload, at)
        at += struct.calcsize("<Qq5d3IHBB")
        names = "point begun start stop duration delay interval samples steps repeat channels down stepped"
        acquisition = dict(zip(names.split(), fields))
        channels = {}
        for _ in range(acquisition["channels"]):
            scale, offset, samples, clipped, code, n, u, _ = struct.unpack_from("<2d2I4B", payload, at)
            at += 28
            name, unit = payload[at : at + n].decode(), payload[at + n : at + n + u].decode()
            at += n + u
            dtype = np.dtype({1: "<i1", 2: "<u1", 3: "<i2", 4: "<u2", 5: "<f4", 6: "<f8"}[code])
            codes = np.frombuffer(payload, dtype, samples, at)
            at += samples * dtype.itemsize
            channels[name] = {"codes": codes, "scale": scale, "offset": offset, "unit": unit, "clipped": clipped}
        acquisition["channels"] = channels
        yield acquisition
    assert at == len(payload)


# --- The comparison --------------------------------------------------------------------------------------------


def frequency(a):
    """Frequency at every sample, after docs/archive.md."""
    done = (a["delay"] + np.arange(a["samples"]) * a["interval"]) / a["duration"]
    if a["stepped"] and a["steps"] >= 2:
        step = np.clip(np.floor(done * a["steps"] + 1e-9), 0, a["steps"] - 1)
        done = step / (a["steps"] - 1)
    return a["start"] + (a["stop"] - a["start"]) * np.clip(done, 0, 1)


class Expected:
    """What the archive must say, from the journal."""

    def __init__(self, folder):
        records = list(journal(folder / "journal"))
        self.entries = [entry for entry, _ in records]
        self.header = self.entries[0]["kind"]["opened"]
        points = [(e["kind"]["point"], t or []) for e, t in records if "point" in e["kind"]]
        self.points = [point for point, _ in points]
        self.traces = [trace for _, trace in points]
        everything = [a for trace in self.traces for a in trace]
        self.directions = sorted({a["down"] for a in everything})
        self.repeats = max((a["repeat"] + 1 for a in everything), default=0)
        lengths = [len(c["codes"]) for a in everything for c in a["channels"].values()]
        self.samples = max(lengths, default=0)
        self.channels = list(dict.fromkeys(name for a in everything for name in a["channels"]))

    def cells(self, trace):
        for a in trace:
            yield (self.directions.index(a["down"]), a["repeat"]), a

    def volts(self, channel):
        shape = (len(self.points), len(self.directions), self.repeats, self.samples)
        values = np.full(shape, np.nan)
        for p, trace in enumerate(self.traces):
            for cell, a in self.cells(trace):
                if channel in a["channels"]:
                    c = a["channels"][channel]
                    values[(p, *cell)][: len(c["codes"])] = c["codes"].astype(float) * c["scale"] + c["offset"]
        return values

    def frequencies(self):
        values = np.full((len(self.points), len(self.directions), self.samples), np.nan)
        for p, trace in enumerate(self.traces):
            for (d, _), a in self.cells(trace):
                values[p, d, : a["samples"]] = frequency(a)
        return values

    def column(self, quantity, part):
        values = []
        for point in self.points:
            found = [c for c in point["coordinates"] if c["quantity"] == quantity]
            value = found[0][part] if found else None
            if isinstance(value, dict):
                value = next(iter(value.values()))
            values.append(np.nan if value is None else float(value))
        return np.array(values)


def same(a, b, tolerance=0.0):
    a, b = np.asarray(a), np.asarray(b)
    assert a.shape == b.shape, (a.shape, b.shape)
    if a.dtype.kind in "iu" and b.dtype.kind in "iu":
        np.testing.assert_array_equal(a, b)  # a float has too few bits for a time in ns
        return
    np.testing.assert_allclose(a, b, rtol=tolerance, atol=tolerance * 0.1, equal_nan=True)


def text(value):
    return value.decode() if isinstance(value, bytes) else str(value)


def mean_and_error(values):
    count = np.sum(np.isfinite(values), axis=2)
    total = np.where(np.isfinite(values), values, 0.0).sum(axis=2)
    mean = np.divide(total, count, out=np.full(count.shape, np.nan), where=count > 0)
    deviations = np.where(np.isfinite(values), values - mean[:, :, None], 0.0)
    squares = np.square(deviations).sum(axis=2)
    error = np.full(count.shape, np.nan)
    np.divide(squares, count * (count - 1), out=error, where=count > 1)
    return mean, np.sqrt(error)


def check_xarray(path, expected, engine):
    with xarray.open_dataset(path, engine=engine) as ds:
        assert ds.attrs["title"] == expected.header["title"]
        assert text(ds.bench_toml.values[()]) == expected.header["bench"]
        if not expected.points:
            assert "point" not in ds.sizes
            return
        same(ds.point, [p["index"] for p in expected.points])
        assert ds.begun.dtype == "datetime64[ns]"
        same(ds.begun.values.astype("int64"), [p["begun"] for p in expected.points])
        for quantity in {c["quantity"] for p in expected.points for c in p["coordinates"]}:
            for part in ("setpoint", "readback", "measured"):
                same(ds[f"{quantity.replace('.', '_')}_{part}"], expected.column(quantity, part))
        assert ds.coil_current_setpoint.units == "A"
        check_flags(ds, expected)
        check_guards(ds, expected)
        for channel in expected.channels:
            assert ds[channel].dims == ("point", "direction", "sample")
            assert ds[channel].units == "V"
            assert "detuning" in ds[channel].coords, "the detuning labels the samples"
            mean, error = mean_and_error(expected.volts(channel))
            same(ds[channel], mean, 1e-6)
            same(ds[f"{channel}_standard_error"], error, 1e-5)
        same(ds.detuning + ds.detuning_zero, expected.frequencies(), 1e-14)
        assert ds.detuning.units == "Hz"
        assert ds.signal.isel(point=0, direction=0).sizes == {"sample": expected.samples}
    with xarray.open_dataset(path, engine=engine, group="acquisitions") as ds:
        assert dict(ds.sizes) == {
            "point": len(expected.points),
            "direction": len(expected.directions),
            "repeat": expected.repeats,
            "sample": expected.samples,
        }, ds.sizes
        for channel in expected.channels:
            volts = expected.volts(channel)
            if "comment" in ds[channel].attrs:
                same(ds[channel] * ds[f"{channel}_scale"] + ds[f"{channel}_offset"], volts, 1e-15)
            else:
                same(ds[channel], volts, 1e-15)
    with xarray.open_dataset(path, engine=engine, group="entries") as ds:
        same(ds.entry, [e["seq"] for e in expected.entries])
        same(ds.utc.values.astype("int64"), [e["utc"] for e in expected.entries])
        assert [text(kind) for kind in ds.kind.values] == [next(iter(e["kind"])) for e in expected.entries]
    with xarray.open_datatree(path, engine=engine) as tree:
        assert "acquisitions" in tree.children


def check_flags(ds, expected):
    masks = dict(zip(ds["flags"].flag_meanings.split(), ds["flags"].flag_masks))
    for value, point in zip(ds["flags"].values, expected.points):
        set_here = {word for word, mask in masks.items() if value & mask}
        assert set_here == {flag.replace("-", "_") for flag in point["flags"]}
    kinds = dict(zip(ds.point_kind.flag_values, ds.point_kind.flag_meanings.split()))
    same([kinds[k] == next(iter(p["kind"])) for k, p in zip(ds.point_kind.values, expected.points)],
         [True] * len(expected.points))
    for p, point in enumerate(expected.points):
        if "grid" in point["kind"]:
            same(ds.grid.values[p], point["kind"]["grid"]["grid"])
        else:
            assert np.isnan(ds.grid.values[p]).all()


def check_guards(ds, expected):
    for stage in ("before", "after"):
        wanted = [g["lowest"] for p in expected.points for g in p["guards"] if g["stage"] == stage]
        same(ds[f"guard_0_lock_level_{stage}_lowest"], [np.nan if w is None else w for w in wanted])
        assert ds[f"guard_0_lock_level_{stage}_lowest"].units == "V"


def check_netcdf4(path, expected):
    with netCDF4.Dataset(path) as ds:
        assert ds.data_model == "NETCDF4"
        assert ds.source.startswith("darkline")
        assert str(ds["bench_toml"][:]) == expected.header["bench"]
        assert not any(d.isunlimited() for d in ds.dimensions.values())
        if not expected.points:
            return
        assert ds["signal"].dimensions == ("point", "direction", "sample")
        mean, _ = mean_and_error(expected.volts("signal"))
        same(np.ma.filled(ds["signal"][:].astype(float), np.nan), mean, 1e-6)
        words = ds["entries/words"][:]
        assert len(words) == len(expected.entries) and str(words[0]).startswith("run opened")
        assert str(ds["instruments/identity"][0]) == "EXAMPLE,DIGITIZER,0,1.0 µ"


def check_h5py(path, expected, folder):
    with h5py.File(path) as f:
        assert f.attrs["layout"][0] == 1
        assert f["bench_toml"][:].tobytes().decode() == expected.header["bench"]
        whole = sum(1 for _ in journal(folder / "journal"))
        assert whole == len(f["entries/entry"])
        damage = f.attrs.get("journal_damage", b"").decode()
        assert ("no whole record" in damage) == (folder.name == "torn"), damage
        if not expected.points:
            return
        assert [f["signal"].dims[i][0].name for i in range(3)] == ["/point", "/direction", "/sample"]
        # Codes are what the digitizer sent, bit for bit, and nothing else is.
        for channel in expected.channels:
            stored = f["acquisitions"][channel]
            fill = stored.attrs.get("_FillValue")
            values = stored[:]
            seen = np.zeros(values.shape, bool)
            for p, trace in enumerate(expected.traces):
                for cell, a in expected.cells(trace):
                    if channel in a["channels"]:
                        codes = a["channels"][channel]["codes"]
                        assert np.array_equal(values[(p, *cell)][: len(codes)], codes)
                        seen[(p, *cell)][: len(codes)] = True
            if fill is None:
                assert seen.all()
            elif np.isnan(fill[0]):
                assert np.array_equal(np.isnan(values), ~seen)
            else:
                assert np.array_equal(values == fill[0], ~seen)
        answers = [e["kind"]["answered"] for e in expected.entries if "answered" in e["kind"]]
        if answers:
            constant = f["answer/coil_constant"]
            assert constant[()] == answers[-1]["coil_constant"]["value"]
            assert constant.attrs["units"] == b"nT/mA"
            assert f["answer/coil_constant_sigma"][()] == answers[-1]["coil_constant"]["sigma"]
            assert f["answer/transverse_field"].attrs["upper_limit"][0] == answers[-1]["transverse_field"]["upper_limit"]


def main():
    assert crc32c(b"123456789") == 0xE3069283, "check value of CRC-32C"
    folder = Path(sys.argv[1])
    expected = Expected(folder)
    path = folder / "run.h5"
    check_h5py(path, expected, folder)
    check_netcdf4(path, expected)
    for engine in ("h5netcdf", "netcdf4"):
        check_xarray(path, expected, engine)


if __name__ == "__main__":
    main()
