"""Small lines to audit many times, and an audit's files to compare."""

from __future__ import annotations

from pathlib import Path


def write_line(path: Path, line: int, pings: int = 60) -> None:
    """A line of one row a ping, one day a line, each line deeper than the one before."""
    rows = "".join(
        f"{i},2025-05-{4 + line:02d}T10:00:{i // 5:02d}.{i % 5 * 200:03d}Z,{10 + line + 0.01 * i:.2f},100,"
        f"{38.7 + i * 4e-6:.6f},{-9.2 + line * 1e-4:.4f}\n"
        for i in range(pings)
    )
    header = "Ping No,Time,Depth (m),Pulse Length (us),latitude,longitude\n"
    path.write_text(header + rows, encoding="utf-8")


def files_of(folder: Path) -> dict[str, bytes]:
    """Every file's bytes by its name in the folder."""
    return {
        p.relative_to(folder).as_posix(): p.read_bytes()
        for p in sorted(folder.rglob("*"))
        if p.is_file()
    }
