"""The fuzz bench guided by coverage, where the package ``atheris`` is installed.

    python tests/bench/fuzz_guided.py TARGET [--runs N]

The targets are those of ``fuzz.py``. An input that ends in anything but success or a charflow error, takes
longer than 10 s or needs more than 1 GB stops it and is left in the working folder as ``crash-...``.
"""

from __future__ import annotations

import argparse
import importlib
import shutil
import sys
import tempfile
from pathlib import Path

MODULES = (
    "charflow.campaign.store",
    "charflow.plan.derive",
    "charflow.sheet.prune",
    "charflow.sheet.sources",
    "charflow.tables.compare_text",
    "charflow.tables.sides",
)


def main() -> int:
    """Fuzz one target; libFuzzer ends the process itself."""
    try:
        import atheris
    except ImportError:
        print("atheris is not installed; try: python -m pip install atheris", file=sys.stderr)
        return 3
    with atheris.instrument_imports(include=["charflow"]):
        for name in MODULES:
            importlib.import_module(name)
    import fuzz

    from charflow.errors import CharflowError

    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("target", choices=fuzz.TARGETS)
    parser.add_argument("--runs", type=int, default=20_000)
    asked = parser.parse_args()
    target = fuzz.TARGETS[asked.target]
    begin = Path(tempfile.mkdtemp(prefix="charflow-fuzz-"))
    work = begin / "work"
    corpus = begin / "corpus"
    corpus.mkdir()
    for number, data in enumerate(target.begin()):
        (corpus / f"seed-{number}").write_bytes(data[:20_000])

    def one(data: bytes) -> None:
        shutil.rmtree(work, ignore_errors=True)
        work.mkdir()
        try:
            target.read(data, work)
        except CharflowError:
            return

    limits = [f"-timeout={fuzz.LIMIT:.0f}", f"-rss_limit_mb={fuzz.MEMORY >> 20}", "-max_len=20000"]
    atheris.Setup([sys.argv[0], f"-runs={asked.runs}", *limits, str(corpus)], one)
    atheris.Fuzz()
    return 0


if __name__ == "__main__":
    sys.exit(main())
