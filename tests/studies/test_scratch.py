"""Temporary folders of processes that were killed are removed, and no others."""

import subprocess
import sys
import tempfile

from labkit.studies.scratch import new_folder, scratch_folder, sweep_folders


def test_folders_of_dead_processes_are_removed(tmp_path, monkeypatch):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    made = "from labkit.studies.scratch import new_folder; import tempfile, sys; "
    made += "tempfile.tempdir = sys.argv[1]; (new_folder() / 'file').write_text('x')"
    subprocess.run([sys.executable, "-c", made, str(tmp_path)], check=True)
    (dead,) = tmp_path.iterdir()
    own = new_folder()
    foreign = tmp_path / "labkit-somebody"
    foreign.mkdir()
    link = tmp_path / dead.name.replace(dead.name[-8:], "aaaaaaaa")
    link.symlink_to(foreign)
    (foreign / "kept").write_text("x")
    sweep_folders()
    assert set(tmp_path.iterdir()) == {own, foreign, link}
    assert (foreign / "kept").exists()


def test_a_folder_is_removed_at_the_end(tmp_path, monkeypatch):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    with scratch_folder() as folder:
        (folder / "file").write_text("x")
    assert list(tmp_path.iterdir()) == []
