"""State of one server: what is on the shelf, open, uploaded and under way. Nothing of it is global."""

from __future__ import annotations

import asyncio
import shutil
import tempfile
from dataclasses import dataclass, field
from pathlib import Path

from tracker.page.jobs import Jobs
from tracker.page.library import Library
from tracker.page.pictures import Pictures
from tracker.page.results import Results
from tracker.page.uploads import MAX_UPLOAD, Uploads


@dataclass(slots=True)
class Site:
    """All that one server knows."""

    library: Library
    results: Results
    uploads: Uploads
    jobs: Jobs
    pictures: Pictures
    small_pictures: asyncio.Semaphore = field(default_factory=lambda: asyncio.Semaphore(2))
    _scratch: Path | None = None

    @classmethod
    def make(cls, target: Path | None, results: Path, *, upload_limit: int = MAX_UPLOAD) -> Site:
        """Put a server's state together.

        Parameters
        ----------
        target : Path or None
            Result, folder of results, or nothing.
        results : Path
            Folder for new results; made when the first file comes.
        upload_limit : int
            Largest upload in bytes.
        """
        library, jobs = Library(target, results), Jobs()
        return cls(library, Results(library), Uploads(results, limit=upload_limit), jobs, Pictures(jobs))

    def scratch(self) -> Path:
        """Folder for videos until they are saved; goes with the server."""
        if self._scratch is None or not self._scratch.is_dir():
            self._scratch = Path(tempfile.mkdtemp(prefix="fallrise-"))
        return self._scratch

    async def close(self) -> None:
        """End all jobs and remove everything that belongs to this run alone."""
        await self.jobs.close()
        self.pictures.close()
        self.uploads.close()
        if self._scratch is not None:
            shutil.rmtree(self._scratch, ignore_errors=True)
