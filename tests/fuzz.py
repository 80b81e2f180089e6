"""A coverage-guided fuzzer on what strangers may write: rule files and CSV files.

    python -m tests.fuzz rules --minutes 20
    python -m tests.fuzz csv --minutes 20

Whatever the bytes are, the answer is a rule book, rows, or one ``SercheckError`` that can be printed. Anything else is
a crash: its bytes are left in ``tests/fuzz_cases``, where ``tests/test_fuzz_cases.py`` tries them for ever after.
Needs the extra ``fuzz``.
"""

from __future__ import annotations

import argparse
import os
import shutil
import sys
import tempfile
import warnings
from pathlib import Path

from sercheck.errors import SercheckError
from sercheck.intake.layout import Layout

HERE = Path(__file__).parent
CASES = HERE / "fuzz_cases"
LONGEST = 4_000
"""Bytes of an input: what goes wrong goes wrong in a short one too."""
LAYOUT = Layout(
    "at", ("key", "part"), ("x", "y"), "1h", timezone="Europe/Oslo", batch_every="1D", seasons={"day": "1D"}
)


def rules(data: bytes) -> None:
    """A rule file of these bytes: compiled twice to the same, or refused."""
    from sercheck.rulebook import load_rules

    text = data.decode("utf-8", "surrogateescape") + "\n"
    try:
        book = load_rules(text)
    except SercheckError as error:
        _printable(error)
        return
    again = load_rules(text)
    assert book.fingerprint == again.fingerprint
    assert book.rules
    assert all(0 <= rule.false_alarm <= 0.5 for rule in book.rules)


def csv(data: bytes) -> None:
    """A CSV file of these bytes: rows that make a grid, or refused."""
    from sercheck.intake.stream import feed_cadence, feed_grids, open_feed

    folder = Path("/dev/shm") if Path("/dev/shm").is_dir() else Path(tempfile.gettempdir())
    file = folder / f"fuzz-{os.getpid()}.csv"
    file.write_bytes(data)
    try:
        source = open_feed(str(file), LAYOUT)
        rows = source.rows()
        assert len(source.fingerprint) >= 33
        feed_cadence(source, None, LAYOUT)
        cells = 0
        for grid in feed_grids(source, None, LAYOUT):
            assert set(grid.values) == {"x", "y"}
            cells += int(grid.tally.rows.sum())
        assert cells == len(rows)
    except SercheckError as error:
        _printable(error)
    finally:
        file.unlink()


def _printable(error: SercheckError) -> None:
    assert error.place
    assert error.came
    assert "Traceback" not in error.sentence()


TARGETS = {"rules": rules, "csv": csv}


def seeds(what: str) -> list[bytes]:
    """Where the fuzzer begins: good and bad files of the tests, and the crashes of before."""
    found = [path.read_bytes() for path in sorted((CASES / what).glob("*"))]
    if what == "rules":
        files = [*HERE.parent.joinpath("rules").glob("*.yaml"), *HERE.joinpath("bad_rules").glob("*.yaml")]
        return found + [path.read_bytes()[:LONGEST] for path in sorted(files)]
    head = b"at,key,part,x,y\n"
    lines = [
        b"2026-01-12T05:00:00Z,a,1,1.5,\n2026-01-12T06:00:00Z,a,1,NA,-3e5\n",
        b"2026-03-29 02:30,b,17.0,inf,0x1\n2026-10-25 02:30,b,17,nan,1\n2026-10-25 02:30,b,17,1,1\n",
        b'1768194000,"a ""b"", c",2,true,"1,5"\n1768194000000,\xc3\xb8,2,1,2\n',
        b"2026/01/12 5:00,,,,\n1960Q1,x,y,1,2\n20260112T0500,x,y,1,2\r\n",
        b"9999-12-31T23:59:59Z,a,b,1e309,1\n0001-01-01,a,b,1,1\n",
    ]
    odd = [b"", head, b"\xff\xfea\x00t\x00", b"\xef\xbb\xbf" + head + lines[0]]
    return found + [head + line for line in lines] + odd


def main() -> None:
    """Fuzz until the time is up or something crashes."""
    parser = argparse.ArgumentParser(prog="python -m tests.fuzz", description=__doc__)
    parser.add_argument("what", choices=list(TARGETS))
    parser.add_argument("--minutes", type=float, default=20.0)
    asked = parser.parse_args()
    import atheris

    warnings.simplefilter("error")
    with atheris.instrument_imports(include=["sercheck.rulebook", "sercheck.intake", "yaml"]):
        import sercheck.intake.stream
        import sercheck.rulebook.load  # noqa: F401
    corpus = Path(tempfile.mkdtemp(prefix="sercheck-fuzz-"))
    for number, seed in enumerate(seeds(asked.what)):
        (corpus / f"{number:03d}").write_bytes(seed)
    (CASES / asked.what).mkdir(parents=True, exist_ok=True)
    options = [
        f"-max_total_time={asked.minutes * 60:.0f}", f"-max_len={LONGEST}", "-timeout=20", "-rss_limit_mb=4000",
        f"-artifact_prefix={CASES / asked.what}/", "-print_final_stats=1", str(corpus),
    ]  # fmt: skip
    atheris.Setup([sys.argv[0], *options], TARGETS[asked.what])
    try:
        atheris.Fuzz()
    finally:
        shutil.rmtree(corpus, ignore_errors=True)


if __name__ == "__main__":
    main()
