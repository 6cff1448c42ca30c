"""What all tests share: the real recordings, and hypothesis without a clock."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import settings

ROOT = Path(__file__).resolve().parent.parent
REQUIRE_REAL = "QMETER_REQUIRE_REAL"
"""Environment variable: missing real recordings fail instead of being skipped. The continuous integration sets it."""

REAL_FOLDERS = (Path("/usr/share/sonic-pi/samples"), ROOT / ".venv/debian/usr/share/sonic-pi/samples")
"""Where the Debian package sonic-pi-samples puts its recordings: installed by root, or unpacked by .ci/setup."""

REAL_SHA256 = {
    "perc_till.flac": "c6a97c7fb370725c1a0afb6378540aa1205d0b928723f7e92bd5ba3ab3859dc9",
    "tabla_tun3.flac": "595aed5ce92e8ba5f07ea6c1c31dda321eec3e11a749d73e78af16d68e4592c0",
    "tabla_na.flac": "2cf51e38f5173d582d751c4333e5b658f02c01944a5b0d648ef83949edc92563",
    "drum_tom_lo_soft.flac": "473adf163ce22285b633d2a7f7c673a9f1d0820b0ea184cb497ee45d66c939c3",
    "drum_cowbell.flac": "e2ee5f732b675858491e95a06ea419b98af512ebdc154afb2c27066303f0dd7f",
    "guit_harmonics.flac": "197dc69798e07641f2003f394645155e4077d1d75fa6eb44a66f3a00b07e73ee",
}
"""CC0-1.0 by the copyright file of the package (version 3.2.2~repack-8)."""

# the limit on time is pytest-timeout's; the same examples every run, so that a failure can be had again
settings.register_profile("qmeter", deadline=None, derandomize=True)
settings.load_profile("qmeter")


def find_real(name: str) -> Path | None:
    """Path of a real recording, None where the package is not there; a file with other contents is as good as missing."""
    for folder in REAL_FOLDERS:
        path = folder / name
        if path.is_file() and hashlib.sha256(path.read_bytes()).hexdigest() == REAL_SHA256[name]:
            return path
    return None


def real_path(name: str) -> Path:
    """Path of a real recording; without it the calling test is skipped, or fails if they are required."""
    path = find_real(name)
    if path is not None:
        return path
    says = f"{name} of the Debian package sonic-pi-samples is missing or not the one expected: run `sh .ci/setup test`"
    if os.environ.get(REQUIRE_REAL):
        pytest.fail(f"{says} ({REQUIRE_REAL} is set)")
    pytest.skip(says)


@pytest.fixture(scope="session")
def real_recording() -> Callable[[str], Path]:
    """Gives the path of a recording of sonic-pi-samples by its file name, see `real_path`."""
    return real_path


def pytest_report_header() -> str:
    """Says at the top of each run which real recordings the tests have."""
    missing = [name for name in REAL_SHA256 if find_real(name) is None]
    if not missing:
        return f"real recordings: all {len(REAL_SHA256)} there"
    return f"real recordings: MISSING {', '.join(missing)}; tests on them are {'failed' if os.environ.get(REQUIRE_REAL) else 'skipped'}"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """A module's SHORTFALLS are expected to fail, strictly: each says what falls short, and the run breaks on the day one is mended."""
    for item in items:
        reason = getattr(getattr(item, "module", None), "SHORTFALLS", {}).get(item.name)
        if reason:
            item.add_marker(pytest.mark.xfail(strict=True, reason=reason))
