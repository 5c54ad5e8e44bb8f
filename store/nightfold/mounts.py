"""Whether a folder lies on a network share, where SQLite's write-ahead log must not be used.

Source: https://www.sqlite.org/wal.html, section 1: all processes using a WAL database must be on the same host.
"""

from __future__ import annotations

import re
from pathlib import Path

_NETWORK = {
    "9p", "afs", "afpfs", "beegfs", "ceph", "cifs", "davfs", "glusterfs", "gpfs", "lustre", "ncpfs",
    "nfs", "nfs4", "smb3", "smbfs", "smb2", "vboxsf", "prl_fs",
}  # fmt: skip
_MOUNTS = Path("/proc/self/mounts")


def network_file_system(folder: Path) -> str | None:
    """Return the type of the network file system a folder lies on, or None for a local disk.

    On Linux by the mount table, elsewhere by the form of the path (``//server/share``).
    """
    full = str(folder.resolve())
    if full.startswith(("\\\\", "//")):
        return "unc"
    try:
        table = _MOUNTS.read_text(encoding="utf-8", errors="surrogateescape")
    except OSError:
        return None
    return _type_of(full, table)


def _type_of(full: str, table: str) -> str | None:
    best, kind = "", ""
    for line in table.splitlines():
        parts = line.split(" ")
        if len(parts) < 3:
            continue
        point = re.sub(r"\\([0-7]{3})", lambda code: chr(int(code[1], 8)), parts[1])
        inside = full == point or full.startswith(point.rstrip("/") + "/")
        if inside and len(point) >= len(best):
            best, kind = point, parts[2]
    network = kind in _NETWORK or (
        kind.startswith("fuse.") and kind.removeprefix("fuse.") in _NETWORK | {"sshfs", "rclone"}
    )
    return kind if network else None
