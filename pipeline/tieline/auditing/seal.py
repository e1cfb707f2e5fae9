"""The seal of a published reduction: a list of checksums that `sha256sum -c` verifies as well."""

from __future__ import annotations

from pathlib import Path

from tieline.auditing.folder import Difference
from tieline.lock import SEAL_NAME, locked
from tieline.provenance import bytes_digest
from tieline.storage import write_text


def seal(run_folder: Path) -> int:
    """Writes the checksums of every file of the folder; returns how many.

    Raises InputError where the folder is sealed already.
    """
    with locked(run_folder):
        digests = {name: bytes_digest((run_folder / name).read_bytes()) for name in sealed_files(run_folder)}
        write_text(run_folder / SEAL_NAME, "".join(f"{digest}  {name}\n" for name, digest in digests.items()))
    return len(digests)


def is_sealed(run_folder: Path) -> bool:
    return (run_folder / SEAL_NAME).exists()


def sealed_files(run_folder: Path) -> list[str]:
    """Every file that a seal covers: all but the seal, hidden and temporary files; paths with `/`."""
    paths = (path for path in run_folder.rglob("*") if path.is_file())
    names = (path.relative_to(run_folder).as_posix() for path in paths)
    return sorted(
        name
        for name in names
        if name != SEAL_NAME and not any(part.startswith(".") for part in name.split("/"))
    )


def seal_differences(run_folder: Path) -> list[Difference]:
    """Files that the seal lists otherwise, lists and that are gone, or does not list."""
    if not is_sealed(run_folder):
        return []
    listed: dict[str, str] = {}
    for line in (run_folder / SEAL_NAME).read_bytes().decode(errors="replace").splitlines():
        digest, separator, name = line.partition("  ")
        if not separator or len(digest) != 64 or set(digest) - set("0123456789abcdef"):
            return [Difference("seal", SEAL_NAME, "is no list of checksums: damaged or edited")]
        listed[name] = digest
    present = set(sealed_files(run_folder))
    differences = [
        Difference("seal", name, "was added after the folder was sealed")
        for name in sorted(present - set(listed))
    ]
    for name, digest in sorted(listed.items()):
        if name not in present:
            differences.append(Difference("seal", name, "was removed after the folder was sealed"))
        elif bytes_digest((run_folder / name).read_bytes()) != digest:
            differences.append(Difference("seal", name, "is not the file that was sealed"))
    return differences
