"""The one sentence that every output of Fallow carries."""

from typing import Final

#: Shown on every scan, job, report, image and page; no setting turns it off.
CAUTION: Final = "Not for diagnosis. Research use only."
