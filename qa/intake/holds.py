"""Why a file can be held: a table of codes, each with what it means and what to do about it."""

from __future__ import annotations

from qa.intake.series import Held

CODES: dict[str, tuple[str, str]] = {
    "unreadable": ("cannot be read", "Check the file's permissions and the disk, then ingest it again."),
    "not-dicom": ("is not a DICOM file", "Nothing to do if it is not image data; otherwise export it again."),
    "not-mr-image": (
        "is DICOM, but not an MR image",
        "Only MR Image, Enhanced MR and Legacy Converted Enhanced MR are used.",
    ),
    "truncated": ("ends before its pixel data do", "Copy or export it again: the transfer was cut short."),
    "damaged": ("has a header that cannot be understood", "Export it again from the scanner or archive."),
    "damaged-archive": (
        "is an archive, or lies in one, that cannot be read to its end",
        "Pack it again, or unpack it yourself and ingest the folder.",
    ),
    "encrypted": ("is encrypted", "Unpack the archive yourself and ingest the folder."),
    "no-pixels": ("has no pixel data", "Export it again with pixel data."),
    "too-large": ("claims more than this tool accepts", "Check the file: no phantom image is that large."),
    "not-grey": ("is not a grey-scale image", "Only images with one sample per pixel are measured."),
    "undecodable": (
        "has pixel data that cannot be decoded",
        "Export it uncompressed, or install a decoder for its transfer syntax.",
    ),
    "no-identity": ("lacks a study, series or instance UID", "Export it again from the scanner or archive."),
    "no-date": ("does not say when it was acquired", "Export it again without removing the acquisition date and time."),
    "no-geometry": ("does not say how large its pixels are", "Export it again: PixelSpacing is needed."),
    "missing-timing": (
        "does not say its inversion or echo time",
        "The time is never guessed from the order of files: export it with the original header.",
    ),
    "mixed-matrix": (
        "has another matrix, pixel size or orientation than the rest of its scan",
        "Scan all times of one scan with one set-up.",
    ),
    "same-uid-other-content": (
        "has the SOP Instance UID of another file but other content",
        "Find out which of the two is the original; one of them was altered after the scan.",
    ),
    "names-a-person": (
        "carries entries that may belong to a person and cannot be blanked",
        "Remove them and ingest it again: files are kept only without such entries.",
    ),
    "unknown-scanner": ("comes from a scanner that site.toml does not know", ""),
    "unknown-phantom": ("shows a phantom that site.toml does not know", ""),
    "archive-lost": ("is missing from the archive or altered there", "Restore the archive folder from its backup."),
}


def hold(path: str, code: str, detail: str = "", sha256: str | None = None) -> Held:
    """A held file with whole sentences: what it is, in detail, and what to do."""
    meaning, remedy = CODES[code]
    sentence = f"{meaning}: {detail}" if detail else meaning
    return Held(path, code, f"{sentence}. {remedy}" if remedy else sentence, sha256)
