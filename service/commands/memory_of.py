"""How much memory a process and its children hold, read from the kernel where it tells."""

from __future__ import annotations

from pathlib import Path

PROCESSES = Path("/proc")
KIB = 1024


def family(pid: int) -> list[int]:
    """A process and all that came of it; itself alone where the kernel does not tell."""
    parents = dict[int, int]()
    for folder in PROCESSES.glob("[0-9]*"):
        stat = _text(folder / "stat")
        # The name in brackets may hold blanks; what follows it does not.
        fields = stat.rpartition(")")[2].split()
        if len(fields) > 1:
            parents[int(folder.name)] = int(fields[1])
    found = [pid]
    for parent in found:
        found += [child for child, its in parents.items() if its == parent]
    return found


def peak_bytes(pid: int) -> int | None:
    """The most memory (resident set) that the family held since the last `forget_peak`."""
    told = [_peak(one) for one in family(pid)]
    known = [size for size in told if size is not None]
    return sum(known) if known else None


def forget_peak(pid: int) -> None:
    """Let the peak begin anew at what is held now, where the kernel lets us."""
    for one in family(pid):
        path = PROCESSES / str(one) / "clear_refs"
        if path.exists():
            path.write_text("5")


def _peak(pid: int) -> int | None:
    for line in _text(PROCESSES / str(pid) / "status").splitlines():
        if line.startswith("VmHWM:"):
            return int(line.split()[1]) * KIB
    return None


def _text(path: Path) -> str:
    """The text of a file of the kernel; nothing where its process has just ended."""
    try:
        return path.read_text(errors="replace")
    except OSError:
        return ""
