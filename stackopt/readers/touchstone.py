"""Pairs of Touchstone files, S21 without and with the sheet; the only import of scikit-rf, an optional extra."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stackopt.errors import Finding, InputError
from stackopt.readers.files import lines_of, read_text

Real = NDArray[np.float64]

MAX_LINES, MAX_LINE = 100_000, 1000
SAME_FREQUENCY = 1e-6
"""Relative difference up to which two analysers' frequencies are one."""


def read_pair(path: Path, without: Path | None) -> tuple[Real, Real, Real, list[str]]:
    """Read S21 with the sheet from one Touchstone file and without it from another.

    Returns
    -------
    frequency_hz, without_db, with_db : ndarray, shape (frequency,)
    remarks : list of str

    Raises
    ------
    InputError
        When a file cannot be used, the two do not belong together, or scikit-rf is not installed.
    """
    if without is None:
        message = "holds one state only; name the Touchstone file without the sheet too"
        raise InputError(Finding(str(path), "", f"{message} (--without FILE, or without = in a setup file)"))
    wrong = [file for file in (path, without) if file.suffix.lower() != ".s2p"]
    if wrong:
        message = "is no Touchstone two-port; a pair is two .s2p files (a CSV sweep holds both states itself)"
        raise InputError([Finding(str(file), "", message) for file in wrong])
    shielded, open_ = _read(path), _read(without)
    f, other = shielded.f, open_.f
    if len(f) != len(other) or not np.allclose(f, other, rtol=SAME_FREQUENCY, atol=0.0):
        message = f"has other frequencies than {without.name}; measure both with the same settings"
        raise InputError(Finding(str(path), "", message))
    size = [np.abs(network.s[:, 1, 0]) for network in (open_, shielded)]
    for file, values in zip((without, path), size, strict=True):
        if not np.all(np.isfinite(values)) or np.any(values <= 0.0):
            raise InputError(Finding(str(file), "", "has an S21 of 0 or none at all; measure again"))
    keep = f > 0.0
    if not np.any(keep):
        raise InputError(Finding(str(path), "", "has no frequency above 0 Hz; measure again"))
    remarks = [] if np.all(keep) else ["frequencies not above 0 Hz, left out"]
    without_db, with_db = (np.asarray(20.0 * np.log10(values[keep]), dtype=float) for values in size)
    return np.asarray(f[keep], dtype=float), without_db, with_db, remarks


def _read(path: Path) -> Any:
    try:
        from skrf import Network
    except ImportError:
        message = 'needs scikit-rf, which is not installed; install it with pip install "stackopt[touchstone]"'
        raise InputError(Finding(str(path), "", f"{message}, or export CSV")) from None
    try:
        lines = lines_of(read_text(path))
    except ValueError as error:
        raise InputError(Finding(str(path), "", str(error))) from None
    longest = max(map(len, lines))
    if longest > MAX_LINE or len(lines) > MAX_LINES:  # the reader of the format takes hours for some of them
        message = f"has {len(lines)} lines of up to {longest} characters; {MAX_LINES} of up to {MAX_LINE} are read"
        raise InputError(Finding(str(path), "", message))
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            network = Network(str(path))
    except Exception as error:  # the reader raises many kinds for a broken file
        reason = " ".join(str(error).split())[:80]
        raise InputError(Finding(str(path), "", f"is not a readable Touchstone file ({reason})")) from None
    if network.nports != 2 or not len(network.f):
        raise InputError(Finding(str(path), "", f"has {network.nports} ports; S21 needs a two-port, .s2p"))
    return network
