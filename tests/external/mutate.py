"""Sound files of a format spoilt at random, by the thousand: each must open or be refused in one sentence.

``python -m tests.external.mutate FORMAT N [SEED]`` (FORMAT: a key of ``MAKERS``, or ``all``). Watched
beside the answer: time, memory held against the size of the file, files opened and the network.
"""

from __future__ import annotations

import re
import sys
import tempfile
import time
import tracemalloc
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))  # the makers, also when run as a script

from readers import made  # noqa: E402

from sigguard.errors import ReadError  # noqa: E402
from sigguard.readers import find_recordings, open_recording  # noqa: E402

N = 300
SLOW_S = 10.0
SPARE_BYTES = 8 << 20  # interpreter, chunks and blocks of a fixed size
BYTES_PER_BYTE = 100  # of memory for one of the file: an XML element is as short as 4 bytes
TOKENS = (
    *(b"99999999", b"-1", b"0", b"1e308", b"-1e999", b"nan", b"inf", b"0.0000001", b"2147483648", b"\0" * 8),
    *(
        b"\xff" * 8,
        b"\x1b[31m",
        b"\r\n",
        b"../../etc/passwd",
        b"http://example.org/",
        b"<!DOCTYPE a [",
        b"&x;",
    ),
    *(
        b"<digits>",
        b"</digits>",
        b"<a><b>",
        b"EDF+D",
        b"BDF+C",
        b"+1\x14\x14",
        b"\x7f\xff\xff\x7f",
        b"\x00\x80",
    ),
    *(b"%s%n", b"\xf0\x9f\x92\x94", b"' OR 1=1", b"9" * 40),
)

SAFE_TOKENS = (
    *(t for t in TOKENS if t.isascii() and t.decode().isprintable() and not {*b"<&"} & {*t}),
    *(
        b"",
        b"mV",
        b"ms",
        b"s",
        b"1e-320",
        b"RHYTHM",
        b"TIME_RELATIVE",
        b"20990101000000",
        b"1 2 3",
        b"\xc2\xb5V",
    ),
    *(b"7" * 400, b"1.5", b"0x10", b"1_000", b"\xd9\xa3", b"&#10;", b"&lt;script&gt;"),
)


def _edf(path: Path, bits: int, kind: str) -> Path:
    one, two = made.digits(2, N, bits)
    signals = [
        {"label": "ECG I", "steps": one},
        {"label": "ECG II", "steps": two},
        {"label": "Resp", "unit": "Ohm", "steps": one},
    ]
    starts = [0.2 * k + (k > 1) for k in range(3)] if kind == "+D" else None
    return made.edf_file(path, signals, record_s=0.2, bits=bits, kind=kind, starts_s=starts)


def _aecg(path: Path) -> Path:
    late = made.aecg_set(made.digits(1, N, 12), ["V1"], head='<head value="20200102030406.250"/>')
    return made.aecg_file(path, [made.aecg_set(made.digits(2, N, 12), ["I", "II"]), late])


MAKERS: dict[str, Callable[[Path], Path]] = {
    "edf": lambda p: _edf(p, 16, ""),
    "edf+c": lambda p: _edf(p, 16, "+C"),
    "edf+d": lambda p: _edf(p, 16, "+D"),
    "bdf": lambda p: _edf(p, 24, ""),
    "bdf+d": lambda p: _edf(p, 24, "+D"),
    "aecg": _aecg,
    "ishne": lambda p: made.ishne_file(p, made.digits(3, N, 16), codes=[5, 6, 11], note=b"note"),
}


def spoil(data: bytes, rng: np.random.Generator) -> bytes:
    """One to four changes, half of them in the first 2000 bytes, where headers are."""
    out = bytearray(data)
    for _ in range(rng.integers(1, 5)):
        if not out:
            break
        end = min(len(out), 2000) if rng.random() < 0.5 else len(out)
        at = int(rng.integers(0, end))
        n = int(rng.integers(1, 40))
        match int(rng.integers(0, 10)):
            case 0:
                out[at] ^= 1 << int(rng.integers(0, 8))
            case 1:
                out[at] = int(rng.integers(0, 256))
            case 2:
                out[at : at + n] = bytes(len(out[at : at + n]))
            case 3:
                out[at : at + n] = rng.bytes(len(out[at : at + n]))
            case 4:
                del out[at:]
            case 5:
                del out[at : at + n]
            case 6:
                out[at:at] = out[at : at + n] * int(rng.integers(1, 4))
            case 7:
                other = int(rng.integers(0, end))
                out[at : at + n], out[other : other + n] = out[other : other + n], out[at : at + n]
            case 8:
                token = TOKENS[int(rng.integers(0, len(TOKENS)))]
                out[at : at + len(token)] = token
            case _:  # a header field of 8 characters, and a binary one, aligned as fields are
                token = TOKENS[int(rng.integers(0, len(TOKENS)))][:8].ljust(8)
                at -= at % 8
                out[at : at + 8] = token
    return bytes(out)


PYTHON = (sys.prefix, sys.base_prefix)  # modules loaded late, such as the codec a document names


@dataclass(slots=True)
class Watch:
    """What an audit of the interpreter saw while it was on."""

    folder: str = ""
    seen: list[str] = field(default_factory=list)

    def __call__(self, event: str, args: tuple) -> None:
        if not self.folder:
            return
        outside = event == "open" and not str(args[0]).startswith((self.folder, *PYTHON))
        if outside or event.startswith(("socket.", "subprocess.", "os.exec", "os.system", "urllib.")):
            self.seen.append(f"{event} {args[0]!r}")


WATCH = Watch()
sys.addaudithook(WATCH)


def spoil_xml(data: bytes, rng: np.random.Generator) -> bytes:
    """One to three changes after which most documents are still sound XML: values, and whole elements."""
    for _ in range(rng.integers(1, 4)):
        kind = (rb'"([^"]*)"', rb"<(\w+)[^<>]*/>", rb"<(\w+)[^<>]*>[^<>]*</\1>")[int(rng.integers(0, 3))]
        places = [found.span() for found in re.finditer(kind, data[60:])]
        if not places:
            continue
        start, end = (60 + at for at in places[int(rng.integers(0, len(places)))])
        part = data[start:end]
        token = SAFE_TOKENS[int(rng.integers(0, len(SAFE_TOKENS)))]
        if part[:1] == b'"':
            part = b'"' + token + b'"'
        else:
            part = (b"", part * 3, re.sub(rb">[^<]*<", b"> " + token + b" <", part))[int(rng.integers(0, 3))]
        data = data[:start] + part + data[end:]
    return data


@dataclass(slots=True)
class Tally:
    """Counts of answers; ``failures`` holds what broke the promise."""

    opened: int = 0
    refused: int = 0
    slowest_s: float = 0.0
    most_bytes: int = 0
    failures: list[str] = field(default_factory=list)


def variants(name: str, folder: Path, count: int, seed: int) -> Iterator[bytes]:
    sound = MAKERS[name](folder / "sound").read_bytes()
    rng = np.random.default_rng([seed, *name.encode()])
    for number in range(count):
        yield (spoil_xml if name == "aecg" and number % 2 else spoil)(sound, rng)


def run(name: str, folder: Path, count: int, *, seed: int = 0) -> Tally:
    """Read ``count`` spoilt files of a format; never raises for what a reader does."""
    tally = Tally()
    path = folder / "spoilt"
    path.write_bytes(MAKERS[name](folder / "sound").read_bytes())
    _read(path)  # modules are loaded by now, so that whatever is opened later is the reader's doing
    tracemalloc.start()
    try:
        for number, data in enumerate(variants(name, folder, count, seed)):
            path.write_bytes(data)
            _one(path, data, number, tally)
    finally:
        tracemalloc.stop()
    return tally


def _one(path: Path, data: bytes, number: int, tally: Tally) -> None:
    tracemalloc.reset_peak()
    before, start = tracemalloc.get_traced_memory()[0], time.perf_counter()
    WATCH.folder, WATCH.seen = str(path.parent), []
    held = 0
    try:
        held = _read(path)
        tally.opened += 1
    except ReadError as err:
        tally.refused += 1
        if not str(err).isprintable() or len(str(err)) > 2000:
            tally.failures.append(f"{number}: a sentence that cannot be printed: {str(err)[:200]!r}")
    except BaseException as err:  # noqa: BLE001 - any other error is what is looked for
        tally.failures.append(f"{number}: {type(err).__name__}: {err}")
    finally:
        WATCH.folder = ""
    took, peak = time.perf_counter() - start, tracemalloc.get_traced_memory()[1] - before
    tally.slowest_s, tally.most_bytes = max(tally.slowest_s, took), max(tally.most_bytes, peak)
    tally.failures += [f"{number}: {what}" for what in WATCH.seen]
    if took > SLOW_S:
        tally.failures.append(f"{number}: took {took:.1f} s")
    if peak > SPARE_BYTES + BYTES_PER_BYTE * len(data) + held:
        tally.failures.append(f"{number}: held {peak} bytes for a file of {len(data)}")


def _read(path: Path) -> int:
    """Search, open and read; the bytes that gaps within their limit may cost. AssertionError if windows disagree."""
    find_recordings(path.parent)
    with open_recording(path) as opened:
        info = opened.info
        assert all(text.isprintable() for text in (*info.leads, *info.left_out, *info.assumed))
        assert info.step_mv is not None and np.isfinite(info.step_mv).all() and (info.step_mv > 0).all()
        n = min(info.n_samples, 4 * N)
        whole, end = opened.read(0, n), opened.read(info.n_samples - 2)
        assert whole.shape == (info.n_leads, n) and end.shape == (info.n_leads, 2)
        assert not np.isinf(whole).any()
        np.testing.assert_array_equal(opened.read(n // 3, n // 2), whole[:, n // 3 : n // 2])
        return 64 * n * info.n_leads


def main(arguments: list[str]) -> int:
    names = list(MAKERS) if arguments[0] == "all" else [arguments[0]]
    count, seed = int(arguments[1]), int(arguments[2]) if len(arguments) > 2 else 0
    failed = 0
    for name in names:
        with tempfile.TemporaryDirectory() as folder:
            tally = run(name, Path(folder), count, seed=seed)
        failed += len(tally.failures)
        print(
            f"{name}: {count} spoilt files, {tally.opened} opened, {tally.refused} refused, "
            f"{len(tally.failures)} failures, slowest {tally.slowest_s:.2f} s, "
            f"most memory {tally.most_bytes / 1e6:.1f} MB"
        )
        for failure in tally.failures[:20]:
            print("  " + failure)
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
