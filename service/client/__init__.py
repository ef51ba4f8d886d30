"""Python client of the Fallow service, for acquisition and analysis scripts.

Importing it loads httpx and the standard library alone: NumPy and h5py come in when arrays are handed over or asked
for, and nothing of `recon` ever does (a user's own script is likely called ``recon.py``).

Examples
--------
>>> from service.client import Client
>>> with Client() as client:  # doctest: +SKIP
...     job = client.submit("scan.h5", label="apple")
...     job.wait(progress=True)
...     image = job.image()
"""

from service.client.connection import Client
from service.client.errors import (
    DamagedDownload,
    FallowError,
    InputRefused,
    JobFailed,
    RequestRefused,
    ServiceFault,
    ServiceUnreachable,
    WaitTimedOut,
)
from service.client.jobs import Job

__all__ = [
    "Client",
    "DamagedDownload",
    "FallowError",
    "InputRefused",
    "Job",
    "JobFailed",
    "RequestRefused",
    "ServiceFault",
    "ServiceUnreachable",
    "WaitTimedOut",
]
