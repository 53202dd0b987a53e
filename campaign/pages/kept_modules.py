"""Pages of modules and sensors as an earlier run made and rendered them, where the share is the same.

A share is all that the pages of a module are made from (:mod:`campaign.pages.module_share`): its digest
tells them before anything is made. Where one trial is measured anew, the pages of its own generation change;
those of modules of other generations are found.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path

from campaign.keeping.program import digest_of
from campaign.keeping.store import Store
from campaign.pages.kept_pages import PageFiles, digest_of_value, packed, unpacked, what_renders
from campaign.pages.module_share import ModuleShare


class KeptModules:
    """Finds and keeps what the pages of modules and their sensors became.

    Parameters
    ----------
    store
        Where it is kept; one that is not open finds and keeps nothing, and costs nothing.
    templates
        Folders of templates.
    shared
        What the making and the rendering of all of them see besides the shares.
    """

    def __init__(self, store: Store, templates: Iterable[Path], shared: object) -> None:
        self._store = store
        self._shared: str | None = None
        digest = digest_of_value(shared) if store.is_open else None
        if digest is not None:
            self._shared = digest_of(["module", digest, *what_renders(templates)])
        self._keys: dict[str, str] = {}

    def find(self, share: ModuleShare) -> tuple[PageFiles, ...] | None:
        """Return what an earlier run made of the very same share, or ``None``."""
        digest = digest_of_value(share) if self._shared is not None else None
        if self._shared is None or digest is None:
            return None
        key = digest_of([self._shared, digest])
        found = self._store.get(key)
        pages = tuple(map(unpacked, found)) if isinstance(found, list) else ()
        if pages and None not in pages:
            return tuple(page for page in pages if page is not None)
        self._keys[share.page_slug] = key
        return None

    def keep(self, made: Sequence[PageFiles]) -> None:
        """Keep what a share became that was looked for and not found; the module's own page is the first."""
        key = self._keys.pop(made[0].slug, None) if made else None
        if key is not None:
            self._store.put(key, [packed(page) for page in made])
