"""Files damaged at random for a minute: each is read or refused in words, never a traceback, a hang or nonsense."""

from __future__ import annotations

import itertools
import os
import random
import time
from pathlib import Path

import pytest
from mutations import CHECKPOINT, Job, copy_examples, jobs, mutated, read_or_refuse, read_stack_text, signed

from stackopt.errors import StackoptError

BUDGET_S = 60.0
FIRST_SEED = 20_260
ONE_SEED = os.environ.get("STACKOPT_FUZZ_SEED")
"""A seed that failed, to try it alone."""
STACKS = ("copper 35um", "carbon steel 150um / copper 0.035 mm", "80 % nickel as rolled 2 mil/6um foil 6um")
FEWEST = 100
"""Files that any machine damages and reads in the time; fewer mean that something hangs."""


def seeds() -> itertools.count[int] | list[int]:
    return itertools.count(FIRST_SEED) if ONE_SEED is None else [int(ONE_SEED)]


def try_file(job: Job, folder: Path, rng: random.Random) -> tuple[list[str], bool]:
    """Damage one file, read it and put it back; the names of the damages, and whether it was refused."""
    path = folder / job.file
    whole = path.read_bytes()
    content, names = mutated(whole, rng)
    path.write_bytes(signed(content, rng) if job.file == CHECKPOINT else content)
    try:
        refused = isinstance(read_or_refuse(lambda: job.read(folder)), StackoptError)
    except BaseException as error:
        kept = folder.parent / "damaged" / path.name
        kept.parent.mkdir(exist_ok=True)
        kept.write_bytes(path.read_bytes())
        error.add_note(f"{job.file}: {', '.join(names)}; kept as {kept}")
        raise
    finally:
        path.write_bytes(whole)
    return names, refused


def try_stack(rng: random.Random) -> tuple[list[str], bool]:
    content, names = mutated(rng.choice(STACKS).encode(), rng)
    text = content.decode("utf-8", "surrogateescape")
    try:
        return names, isinstance(read_or_refuse(lambda: read_stack_text(text)), StackoptError)
    except BaseException as error:
        error.add_note(f"stack {text!r}: {', '.join(names)}")
        raise


@pytest.mark.slow
def test_damaged_files_are_read_or_refused(tmp_path: Path) -> None:
    folder = tmp_path / "files"
    copy_examples(folder)
    known = jobs()
    end = time.monotonic() + BUDGET_S
    refused = tried = 0
    for seed in seeds():
        if time.monotonic() > end:
            break
        rng = random.Random(seed)
        try:
            kind = rng.randrange(len(known) + 3)
            _, was_refused = try_file(known[kind], folder, rng) if kind < len(known) else try_stack(rng)
        except BaseException as error:
            error.add_note(f"repeat with STACKOPT_FUZZ_SEED={seed}")
            raise
        tried += 1
        refused += was_refused
    assert ONE_SEED is not None or tried >= FEWEST
    assert ONE_SEED is not None or 0 < refused < tried
