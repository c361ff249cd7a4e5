"""The data folder: one lab at a time, short sockets, private files."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from labmon.engines.faults import EngineFault, FolderInUse
from labmon.engines.folder import LONGEST_SOCKET, DataFolder, own_folder
from labmon.services import find_services

HOLDER = """
import sys, time
from pathlib import Path
from labmon.engines.folder import DataFolder
DataFolder(Path(sys.argv[1])).hold()
print("held", flush=True)
time.sleep(60)
"""


def test_second_holder_is_told_who_holds(folder):
    with pytest.raises(FolderInUse, match=f"process {os.getpid()}") as caught:
        DataFolder(folder.path).hold()
    assert "--data" in str(caught.value), "names the remedy"


def test_folder_is_free_again_after_its_holder_was_killed(folder):
    folder.release()
    holder = subprocess.Popen([sys.executable, "-c", HOLDER, folder.path], stdout=subprocess.PIPE, text=True)
    assert holder.stdout.readline() == "held\n"
    with pytest.raises(FolderInUse, match=f"process {holder.pid}"):
        folder.hold()
    holder.kill()
    holder.communicate()
    folder.hold()


@pytest.mark.parametrize("depth", [1, 30, 60, 200])
def test_socket_addresses_fit_whatever_the_folder(folder, depth):
    """Linux takes 108 bytes with the closing zero (unix(7)); PostgreSQL's lock beside the socket has the longest name."""
    deep = DataFolder(folder.path / ("x" * depth))
    deep.make()
    sockets = deep.sockets()
    assert len(os.fsencode(sockets / ".s.PGSQL.5432.lock")) <= LONGEST_SOCKET
    assert sockets.stat().st_mode & 0o077 == 0
    if sockets.parent != deep.path:
        sockets.rmdir()


def test_socket_folder_of_someone_else_is_refused(tmp_path):
    with pytest.raises(EngineFault, match="belongs to someone else"):
        own_folder(tmp_path, {os.getuid() + 1})
    (tmp_path / "link").symlink_to(tmp_path)
    with pytest.raises(EngineFault, match="belongs to someone else"):
        own_folder(tmp_path / "link", {os.getuid()})


def test_services_are_private_and_found_by_other_commands(folder):
    folder.write_services(database_url="postgresql://a@/b?host=/c", broker_url="redis+socket:///d")
    assert (folder.path / "services.json").stat().st_mode & 0o777 == 0o600
    assert find_services({}, folder.path).database_url == "postgresql://a@/b?host=/c"
    folder.forget_services()
    assert find_services({}, folder.path).database_url == ""


def test_secret_key_is_made_once(folder):
    folder.keep_secret_key()
    first = (folder.path / "secret-key").read_text()
    folder.keep_secret_key()
    assert (folder.path / "secret-key").read_text() == first
    assert len(first.strip()) >= 50


def test_folder_that_cannot_be_made_names_the_remedy():
    with pytest.raises(EngineFault, match="--data"):
        DataFolder(Path("/proc/labmon")).make()
