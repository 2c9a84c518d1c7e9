"""From paths to sessions: every file read once, hashed, archived and grouped by study, scanner and phantom."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Container, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from qa.errors import ArchiveError
from qa.intake.archive import Archive, content_hash
from qa.intake.header import FileHeader
from qa.intake.holds import hold
from qa.intake.persons import blanked, personal_keywords
from qa.intake.reader import DatasetCache, looks_like_dicom, parse, quiet_pydicom, read_file
from qa.intake.series import FileRecord, Held, Session
from qa.intake.unpack import HEAD, is_archive, members
from qa.intake.walk import files_below
from qa.site import Site
from qa.site.paste import phantom_block, scanner_block
from qa.words import Consequence, Remark

LARGEST_ON_DISK = 2 * 1024**3  # bytes of one file
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Intake:
    """What came in. seen = files of sessions + duplicates + held."""

    sessions: tuple[Session, ...]
    held: tuple[Held, ...]
    seen: int
    duplicates: int


def gather(paths: Sequence[Path], site: Site, *, known: Container[str], progress: Progress | None = None) -> Intake:
    """Read all files below `paths`; what is new and usable goes to the archive and into sessions.

    Parameters
    ----------
    paths : files, folders, and archives of either
    known : hashes of files that are in the book already
    progress : told what is being done, how many are done, out of how many

    Raises
    ------
    UsageError
        If a path does not exist.
    ArchiveError
        If the archive cannot be written.
    """
    files = list(files_below(paths))
    taking = _Taking(site, known)
    with quiet_pydicom():
        for number, path in enumerate(files):
            if progress and number % 16 == 0:
                progress("reading files", number, len(files))
            taking.take(path)
    taking.archive.settle()
    if progress:
        progress("reading files", len(files), len(files))
    sessions = tuple(_session(*key, headers, site, taking.cache) for key, headers in taking.found.items())
    return Intake(sessions, tuple(taking.held), taking.seen, taking.duplicates)


class _Taking:
    """One intake under way: every file that it is given ends in exactly one of `found`, `held` and `duplicates`."""

    def __init__(self, site: Site, known: Container[str]) -> None:
        self.site, self.known = site, known
        self.archive, self.cache, self.wanted = Archive(site.archive), DatasetCache(), wanted_keywords(site)
        self.found: dict[tuple[str, str, str], list[FileHeader]] = {}
        self.held: list[Held] = []
        self.seen = self.duplicates = 0
        self._taken: dict[str, str] = {}  # SOP Instance UID = content hash
        self._hashes: set[str] = set()

    def take(self, path: Path) -> None:
        """Read one file, or every file in an archive, and put it where it belongs."""
        try:
            with path.open("rb") as file:
                head = file.read(HEAD)
                if looks_like_dicom(head):
                    size = os.fstat(file.fileno()).st_size
                    found = head + file.read() if size <= LARGEST_ON_DISK else _oversize(path, size)
                    self._sort(str(path), found)
                    return
            if not is_archive(head):
                self._sort(str(path), hold(str(path), "not-dicom"))
                return
            for label, content in members(path):
                self._sort(label, content)
        except OSError as error:
            self._sort(str(path), hold(str(path), "unreadable", error.strerror or type(error).__name__))

    def _sort(self, path: str, content: bytes | Held) -> None:
        self.seen += 1
        ended = content if isinstance(content, Held) else self._settle(content, path)
        if ended is None:
            self.duplicates += 1
        elif isinstance(ended, Held):
            self.held.append(ended)

    def _settle(self, content: bytes, path: str) -> Held | FileHeader | None:
        """What the file is: held, or a header now among `found`, or None for a duplicate."""
        sha256 = content_hash(content)
        if self._is_known(sha256):
            return None
        one = read_file(content, path, sha256, self.wanted, self.site.timezone)
        if isinstance(one, Held):
            return one
        header, dataset = one
        if header.personal:
            kept = blanked(content, parse(content))
            if kept is None:
                return hold(path, "names-a-person", ", ".join(personal_keywords(dataset)), sha256)
            content, sha256 = kept, content_hash(kept)
            if self._is_known(sha256):
                return None
            header = replace(header, sha256=sha256)
        owner = identify(header, self.site)
        if isinstance(owner, Held):
            return owner
        if self._taken.get(header.sop_instance_uid, sha256) != sha256:
            return hold(path, "same-uid-other-content", header.sop_instance_uid, sha256)
        self._taken[header.sop_instance_uid] = sha256
        self._hashes.add(sha256)
        self.archive.put(content, sha256)
        self.cache.keep(sha256, len(content), dataset)
        self.found.setdefault((header.study_uid, *owner), []).append(header)
        return header

    def _is_known(self, sha256: str) -> bool:
        return sha256 in self._hashes or sha256 in self.known


def wanted_keywords(site: Site) -> tuple[str, ...]:
    """Every DICOM keyword that a match table of the site or its recipes asks for."""
    tables: list[Iterable[str]] = [*(one.match for one in site.scanners), *(one.match for one in site.phantoms)]
    tables += [scan.match for line in site.schedules for scan in line.recipe.scans]
    return tuple(dict.fromkeys(["PatientID", *(keyword for table in tables for keyword in table)]))


def identify(header: FileHeader, site: Site) -> tuple[str, str] | Held:
    """Names of scanner and phantom; or the file held, with the block to paste into site.toml."""
    facts: Mapping[str, str] = {**header.facts, **header.wanted}
    scanner, phantom = site.identify(facts)
    target = str(site.folder / "site.toml")
    if scanner is None:
        detail = f"add this to {target}, with a name of your own, and ingest the file again:\n{scanner_block(facts)}\n"
        return hold(header.path, "unknown-scanner", detail, header.sha256)
    if phantom is None and header.personal:
        detail = (
            "it carries entries that may belong to a person, so nothing of them is shown or kept; "
            f"if it is a phantom's, scan it without them, or add a [[phantom]] to {target} by hand"
        )
        return hold(header.path, "unknown-phantom", detail, header.sha256)
    if phantom is None:
        detail = f"add this to {target}, with its plate, and ingest the file again:\n{phantom_block(facts)}\n"
        return hold(header.path, "unknown-phantom", detail, header.sha256)
    return scanner, phantom


def session_from_archive(
    site: Site, files: Sequence[FileRecord], *, run: str
) -> tuple[Session | None, tuple[Held, ...]]:
    """A stored run's session again, from the archive; None (with what is held) where nothing of it can be read."""
    archive, cache, wanted = Archive(site.archive), DatasetCache(), wanted_keywords(site)
    headers: list[FileHeader] = []
    held: list[Held] = []
    owner: tuple[str, str] | None = None
    with quiet_pydicom():
        for record in files:
            try:
                content = archive.read(record.sha256)
            except ArchiveError as error:
                held.append(hold(record.path, "archive-lost", error.what, record.sha256))
                continue
            one = read_file(content, record.path, record.sha256, wanted, site.timezone)
            named = one if isinstance(one, Held) else identify(one[0], site)
            if isinstance(named, Held) or isinstance(one, Held):
                held.append(named if isinstance(named, Held) else one)  # type: ignore[arg-type]  # one of the two is
                continue
            owner = owner or named
            headers.append(one[0])
            cache.keep(record.sha256, len(content), one[1])
    if owner is None:
        return None, tuple(held)
    session = _session(headers[0].study_uid, *owner, headers, site, cache)
    return replace(session, run=run), tuple(held)


def merge(session: Session, earlier: Sequence[FileRecord], site: Site) -> Session:
    """The session joined with what of its run came in before (read from the archive).

    A newcomer that has the SOP Instance UID of an earlier file but other content is held, in `Session.held`: the
    earlier one was measured, and one of the two was altered after the scan. So are files that the archive has lost.
    """
    before, lost = session_from_archive(site, earlier, run=session.run)
    if before is None:
        return replace(session, held=lost)
    have = {header.sop_instance_uid: header.sha256 for header in before.headers}
    altered = [h for h in session.headers if have.get(h.sop_instance_uid, h.sha256) != h.sha256]
    headers = [*before.headers, *(h for h in session.headers if h.sop_instance_uid not in have)]
    cache = session.cache or DatasetCache()
    for header in before.headers:
        dataset = before.cache.take(header.sha256) if before.cache else None
        if dataset is not None:
            cache.keep(header.sha256, header.size, dataset)
    whole = _session(session.study_uid, session.scanner, session.phantom, headers, site, cache)
    refused = [hold(h.path, "same-uid-other-content", h.sop_instance_uid, h.sha256) for h in altered]
    return replace(whole, held=(*refused, *lost))


def run_id(study_uid: str, scanner: str, phantom: str) -> str:
    """Twelve hex digits that are the same at every intake of the same run."""
    return hashlib.sha256(f"{study_uid}|{scanner}|{phantom}".encode()).hexdigest()[:12]


def _session(
    study_uid: str, scanner: str, phantom: str, headers: Sequence[FileHeader], site: Site, cache: DatasetCache
) -> Session:
    ordered = sorted(headers, key=lambda h: (h.acquired, h.series_uid, h.sop_instance_uid))
    facts = ordered[0].facts
    stated_t = _number(facts.get("MagneticFieldStrength", ""))
    nominal_t = site.scanner(scanner).field_t
    remarks = []
    if any(header.personal for header in ordered):
        text = (
            "the files carry a name, birth date or other entry that may belong to a person; "
            "such entries were blanked in what is kept"
        )
        remarks.append(Remark("personal-data", text))
    if any(header.lossy for header in ordered):
        text = "images were compressed with loss, which changes signals by unknown amounts: send them uncompressed"
        remarks.append(Remark("lossy-compression", text, Consequence.WATCH))
    if stated_t is not None and abs(stated_t - nominal_t) > 0.1 * nominal_t:
        text = f"the files say {stated_t:g} T, site.toml says {nominal_t:g} T for this scanner"
        remarks.append(Remark("field-differs", text, Consequence.WATCH))
    return Session(
        run=run_id(study_uid, scanner, phantom),
        study_uid=study_uid,
        scanner=scanner,
        phantom=phantom,
        acquired=min(header.acquired for header in ordered).astimezone(site.timezone),
        field_t=stated_t if stated_t is not None else nominal_t,
        files=tuple(FileRecord(h.path, h.sha256, h.size, h.sop_instance_uid) for h in ordered),
        facts=facts,
        remarks=tuple(remarks),
        archive=site.archive,
        headers=tuple(ordered),
        cache=cache,
    )


def _oversize(path: Path, size: int) -> Held:
    return hold(str(path), "too-large", f"{size} bytes")


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    if value > 100:  # some write gauss
        value /= 10_000.0
    return value if 0 < value < 30 else None
