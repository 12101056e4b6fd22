"""What is wrong with a site file, all of it at once."""

from __future__ import annotations

from collections.abc import Sequence


class SiteError(Exception):
    """A site file that cannot be used: one line a fault, each naming the file, the key and what to write instead."""

    def __init__(self, faults: Sequence[str]) -> None:
        super().__init__("\n".join(faults))
        self.faults = list(faults)
