"""How much memory this process may use."""

from __future__ import annotations

import os
import resource
from pathlib import Path
from typing import Final

#: where a container, or a service manager, says what the processes of a group may use together (versions 2 and 1).
_GROUP_LIMITS: Final = (
    Path("/sys/fs/cgroup/memory.max"),
    Path("/sys/fs/cgroup/memory/memory.limit_in_bytes"),
)


def memory_limit(group_limits: tuple[Path, ...] = _GROUP_LIMITS) -> int:
    """Bytes: the least of the machine's memory, the limit on address space, and that of the control group.

    Parameters
    ----------
    group_limits : tuple of Path
        Files that hold a number of bytes, or a word where there is no limit.
    """
    found = [os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")]
    address_space, _ = resource.getrlimit(resource.RLIMIT_AS)
    if address_space != resource.RLIM_INFINITY:
        found.append(address_space)
    for path in group_limits:
        try:
            text = path.read_text(encoding="ascii").strip()
        except (OSError, UnicodeDecodeError):
            continue
        if text.isdigit():
            found.append(int(text))
    return min(found)
