"""Coverage-guided fuzzing of one target: ``python tests/security/fuzz.py TARGET CORPUS_FOLDER -runs=N``.

Needs ``atheris`` (``pip install atheris``), which neither the product nor its tests need: they replay what was kept in
``tests/security/corpus``, one input in base64 per line. Everything after the target goes to libFuzzer.

``python tests/security/fuzz.py --keep TARGET CORPUS_FOLDER`` writes a folder of inputs as that file.
"""

from __future__ import annotations

import base64
import importlib
import sys
from pathlib import Path

#: What is instrumented, so that new paths through it are noticed.
COVERED = ["nearhand.service", "fuzz_targets"]
CORPUS = Path(__file__).with_name("corpus")
#: Per target, so that the tests stay quick and the repository small.
MOST_KEPT_BYTES = 60_000


def kept(target: str) -> list[bytes]:
    """Return the inputs that were kept of a target."""
    path = CORPUS / f"{target}.txt"
    return [base64.b64decode(line) for line in path.read_text(encoding="ascii").splitlines()] if path.exists() else []


def keep(target: str, folder: Path) -> None:
    """Write the inputs in a folder to the target's file, shortest first, as many as fit."""
    lines = [base64.b64encode(path.read_bytes()).decode() for path in folder.iterdir()]
    chosen: list[str] = []
    for line in sorted(set(lines), key=lambda line: (len(line), line)):
        if line and sum(map(len, chosen)) + len(line) < MOST_KEPT_BYTES:
            chosen.append(line)
    CORPUS.mkdir(exist_ok=True)
    (CORPUS / f"{target}.txt").write_text("".join(f"{line}\n" for line in chosen), encoding="ascii")


def main() -> None:
    """Fuzz until libFuzzer has had enough."""

    if sys.argv[1:2] == ["--keep"]:
        keep(sys.argv[2], Path(sys.argv[3]))
        return
    import atheris  # type: ignore[import-not-found,import-untyped,unused-ignore]

    target, *options = sys.argv[1:]
    sys.path.insert(0, str(Path(__file__).parent))
    with atheris.instrument_imports(include=COVERED):
        module = importlib.import_module("fuzz_targets")
    folders = [Path(option) for option in options if not option.startswith("-")]
    for folder in folders[:1]:
        folder.mkdir(parents=True, exist_ok=True)
        for number, seed in enumerate([*module.seeds(target), *kept(target)]):
            (folder / f"seed-{number}").write_bytes(seed)
    feed = module.TARGETS[target]()
    atheris.Setup([sys.argv[0], *options], feed)
    atheris.Fuzz()


if __name__ == "__main__":
    main()
