"""A real file system of a chosen size on a loop device, for what only a real one does: be full, fail, lose power.

Needs root and loop devices; `why_not` says what is missing. Mounts in a folder of its own and leaves nothing behind.
"""

import os
import shutil
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

TOOLS = ("mount", "umount", "mkfs.ext4", "losetup")
# Write-backs of ext4 itself (lazy initialisation) would count as ours.
MKFS = ("mkfs.ext4", "-q", "-F", "-E", "lazy_itable_init=0,lazy_journal_init=0")


def why_not() -> str | None:
    """Why no file system can be mounted here; None when one can."""
    if os.geteuid() != 0:
        return "mounting needs root"
    if missing := [tool for tool in TOOLS if shutil.which(tool) is None]:
        return f"{', '.join(missing)} not found"
    free = subprocess.run(["losetup", "-f"], capture_output=True, text=True, check=False)
    return None if free.returncode == 0 else f"no loop device: {free.stderr.strip()}"


@dataclass(frozen=True, slots=True)
class LoopDisk:
    image: Path
    mount: Path

    def device(self) -> str:
        """`loop7`."""
        command = ["findmnt", "-no", "SOURCE", str(self.mount)]
        return Path(subprocess.run(command, capture_output=True, text=True, check=True).stdout.strip()).name

    def bytes_written(self) -> int:
        """To the block device, the file system's own journal included."""
        return int(Path(f"/sys/block/{self.device()}/stat").read_text().split()[6]) * 512

    def free(self) -> int:
        state = os.statvfs(self.mount)
        return state.f_bavail * state.f_frsize

    def fill(self, leave: int = 0) -> None:
        """Take all room but `leave` bytes, as somebody else's log would."""
        os.sync()  # blocks that were freed a moment ago count only from now on
        with (self.mount / f"filler-{time.monotonic_ns()}").open("wb") as file:
            for size in (1 << 20, 1 << 12, 1 << 9):
                try:
                    while self.free() > leave:
                        os.write(file.fileno(), bytes(size))
                except OSError:
                    continue

    def clear(self) -> None:
        for filler in self.mount.glob("filler-*"):
            filler.unlink()

    def fail(self) -> None:
        """The file system aborts, as after an I/O error of the card: it takes no write any more."""
        subprocess.run(["mount", "-o", "remount,abort", str(self.mount)], check=True, capture_output=True)


@contextmanager
def mounted(image: Path, mount: Path) -> Iterator[LoopDisk]:
    mount.mkdir(exist_ok=True)
    subprocess.run(["mount", "-o", "loop,noatime", str(image), str(mount)], check=True, capture_output=True)
    try:
        yield LoopDisk(image, mount)
    finally:
        _unmount(mount)


@contextmanager
def new_disk(folder: Path, megabytes: int) -> Iterator[LoopDisk]:
    """An empty ext4 of that size."""
    image = folder / "disk.img"
    with image.open("wb") as file:
        file.truncate(megabytes << 20)
    subprocess.run([*MKFS, "-m", "0", str(image)], check=True, capture_output=True)
    try:
        with mounted(image, folder / "mnt") as disk:
            yield disk
    finally:
        image.unlink(missing_ok=True)


def _unmount(mount: Path) -> None:
    for _ in range(50):
        if subprocess.run(["umount", str(mount)], capture_output=True, check=False).returncode == 0:
            return
        time.sleep(0.1)
    subprocess.run(["umount", "-l", str(mount)], capture_output=True, check=False)
