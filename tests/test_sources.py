"""The version of the library covers the sources that compute, and no others."""

from labkit import sources


def test_the_library_version_covers_what_computes(monkeypatch, tmp_path):
    (tmp_path / "engine").mkdir()
    for room in ("randomness.py", "compiled.py", "engine/loop.py"):
        (tmp_path / room).write_text("a = 1\n")
    monkeypatch.setattr(sources, "PACKAGE", tmp_path)
    monkeypatch.setattr(sources, "COMPUTING", ("randomness.py", "compiled.py", "engine"))
    version = sources.library_version.__wrapped__
    before = version()
    (tmp_path / "figures.py").write_text("b = 1\n")
    (tmp_path / "engine/loop.py").write_bytes(b"a = 1\r\n")
    assert version() == before
    (tmp_path / "engine/loop.py").write_text("a = 2\n")
    assert version() != before
