"""The site file as it was when a row was computed."""

import threading
from pathlib import Path
from tempfile import TemporaryDirectory

from agent.siteplan.errors import SiteFileError
from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from agent.storage.sqlite_series import SeriesReader


class StoredSites:
    """Finds the site of a stored configuration; the one now in force is not read again."""

    def __init__(self, site: SitePlan, reader: SeriesReader) -> None:
        self._site = site
        self._reader = reader
        self._lock = threading.Lock()
        self.reset()

    def reset(self) -> None:
        self._found: dict[int, SitePlan | None] = {}

    def site(self, configuration: int) -> SitePlan | None:
        """None where the text is not stored or this program cannot read it any more."""
        with self._lock:
            if configuration not in self._found:
                self._found[configuration] = self._load(configuration)
            return self._found[configuration]

    def is_own(self, configuration: int) -> bool:
        return self.site(configuration) is self._site

    def _load(self, configuration: int) -> SitePlan | None:
        stored = self._reader.configuration(configuration)
        if stored is None:
            return None
        if stored.digest == self._site.digest:
            return self._site
        with TemporaryDirectory() as folder:
            path = Path(folder) / "site.yaml"
            path.write_text(stored.text, encoding="utf-8")
            try:
                return load_site(path)
            except SiteFileError:
                return None
