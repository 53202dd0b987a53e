"""All recordings of a campaign through the one step: shared out to workers, and only where not yet known."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import cast

from campaign.keeping.program import digest_of, program_digest
from campaign.keeping.value_codec import decode
from campaign.recordings.checks import ReadFile
from campaign.recordings.folder import SurveyedFile
from campaign.recordings.identity import NamingRules
from campaign.recordings.reading_step import (
    ListedRecording,
    ReadingTask,
    StepResult,
    Taken,
    module_of,
    read_task,
    split_task,
    worker_died,
)
from campaign.recordings.recording import Trial
from campaign.recordings.steering import campaign_steering, file_steering, module_steering, steering_rules
from campaign.workers.crew import Crew
from campaign.workers.sharing import Work, share_out
from campaign.workers.workshop import Workshop

BATCH_BYTES = 4_000_000
"""Bytes of recordings that are read together."""

SMALLEST_BATCH_BYTES = 200_000
"""Where several workers share few bytes, batches are smaller than :data:`BATCH_BYTES`, down to this."""

BATCHES_A_WORKER = 8

BATCH_FILES = 500
"""Recordings that are read together at most."""

HASHING_SHARE = 0.08
"""What a recording whose content is known costs, as a share of one that is parsed."""

Progress = Callable[[str, int, int], None]
"""Called with what is being done, how much of it is done and how much there is."""


def take_recordings(
    files: Sequence[SurveyedFile],
    rules: NamingRules,
    reduce: Callable[[Trial], object],
    workshop: Workshop,
    progress: Progress,
) -> Iterator[Taken]:
    """Take every recording through the step.

    From another process, and from an earlier run, results come as bytes, which give the same values to the
    last bit (:mod:`campaign.keeping.value_codec`).

    Parameters
    ----------
    files
        Sorted by path.
    rules
        Of the campaign.
    reduce
        Makes of a trial what is kept of it.
    workshop
        Who reads, and what is known already.
    progress
        Told how many bytes are read.

    Yields
    ------
    Taken
        One a recording, in the order of *files*.
    """
    return _SharedReading(files, rules, reduce, workshop, progress).all()


@dataclass
class _SharedReading:
    files: Sequence[SurveyedFile]
    rules: NamingRules
    reduce: Callable[[Trial], object]
    workshop: Workshop
    progress: Progress
    keys: dict[str, str] = field(default_factory=dict)
    known: dict[str, dict[str, Taken]] = field(default_factory=dict)
    modules: dict[str, str] = field(default_factory=dict)

    def all(self) -> Iterator[Taken]:
        if self.workshop.store.is_open:
            self.keys = self._store_keys()
        total = sum(file.size_bytes for file in self.files)
        crew = self.workshop.crew_for(self._bytes_to_parse())
        work: Work[ReadingTask, StepResult] = Work(read_task, split_task, worker_died)
        done = 0
        self.progress("reading", done, total)
        sizes = {file.file: file.size_bytes for file in self.files}
        for results in share_out(work, self._tasks(crew, total), crew):
            for result in results:
                yield self._settled(result, crew)
            done += sum(sizes[result.file] for result in results)
            self.progress("reading", done, total)

    def _store_keys(self) -> dict[str, str]:
        """By file, the key of its results: what steers its reading, and who reduces it."""
        who = f"{self.reduce.__module__}.{self.reduce.__qualname__}"
        campaign = digest_of([program_digest(), who, campaign_steering(self.rules)])
        return {file.file: file_steering(file.file, self.rules, campaign) for file in self.files}

    def _bytes_to_parse(self) -> float:
        held = self.workshop.store.holds(list(self.keys.values()))
        return sum(
            file.size_bytes * (HASHING_SHARE if self.keys.get(file.file) in held else 1.0)
            for file in self.files
        )

    def _tasks(self, crew: Crew, total: int) -> Iterator[ReadingTask]:
        others = crew.hands > 1 or crew.apart
        size = BATCH_BYTES
        if crew.hands > 1:
            size = min(size, max(SMALLEST_BATCH_BYTES, total // (BATCHES_A_WORKER * crew.hands)))
        for batch in batches(self.files, size):
            listed = tuple(self._listed(batch))
            rules = steering_rules(self.rules, [file.file for file in batch])
            yield ReadingTask(listed, rules, self.reduce, with_bytes=bool(self.keys), bytes_alone=others)

    def _listed(self, batch: Iterable[SurveyedFile]) -> Iterator[ListedRecording]:
        """List recordings with the contents that are known of them, whose results are looked up here."""
        batch = list(batch)
        found = self.workshop.store.get_many([self.keys[file.file] for file in batch]) if self.keys else {}
        for file in batch:
            kept = found.get(self.keys.get(file.file, ""), {})
            known = {
                content: taken
                for content, taken in kept.items()
                if isinstance(taken, Taken) and taken.registers == self._registers(taken.read)
            }
            self.known[file.file] = known
            yield ListedRecording(replace(file, location=file.location.absolute()), tuple(known))

    def _registers(self, read: ReadFile) -> str:
        module = module_of(read)
        if module not in self.modules:
            self.modules[module] = module_steering(module, self.rules)
        return self.modules[module]

    def _settled(self, result: StepResult, crew: Crew) -> Taken:
        """Return what is kept of a recording, and keep it for the next run."""
        known = self.known.pop(result.file)
        if result.taken is None and not result.data:
            return known[result.sha256]
        if result.data and not result.sha256 and crew.apart:
            return self._opened_here(result.file)
        if self.keys and result.data and result.sha256:
            self.workshop.store.put_bytes(self.keys[result.file], result.data, result.sha256)
        return result.taken or cast(Taken, decode(result.data))

    def _opened_here(self, name: str) -> Taken:
        """Read here what a worker on another machine could not open."""
        file = next(file for file in self.files if file.file == name)
        rules = steering_rules(self.rules, [name])
        (result,) = read_task(ReadingTask((ListedRecording(file),), rules, self.reduce))
        return cast(Taken, result.taken)


def batches(files: Sequence[SurveyedFile], size_bytes: int = BATCH_BYTES) -> Iterator[list[SurveyedFile]]:
    """Yield files in order, *size_bytes* or :data:`BATCH_FILES` at a time, whichever comes first."""
    batch: list[SurveyedFile] = []
    size = 0
    for file in files:
        batch.append(file)
        size += file.size_bytes
        if size >= size_bytes or len(batch) >= BATCH_FILES:
            yield batch
            batch, size = [], 0
    if batch:
        yield batch
