"""Checksums."""

from __future__ import annotations

from glidefit.running.checksums import sha256


def test_published_digest_of_abc(tmp_path):
    # FIPS 180-2 (2002), appendix B.1; from memory.
    (tmp_path / "abc").write_bytes(b"abc")
    assert sha256(tmp_path / "abc") == (
        "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    )
