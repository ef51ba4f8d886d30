"""The JSON of the HTTP interface: what is sent and what is answered."""

from __future__ import annotations

import unicodedata
from datetime import datetime
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    StringConstraints,
    field_validator,
)

from recon.caution import CAUTION
from recon.settings import Settings, parse_settings
from service.store.estimates import Estimate
from service.store.jobs import JobRecord
from service.store.scans import ScanRecord


def _printable(label: str) -> str:
    if any(unicodedata.category(character) == "Cc" for character in label):
        raise ValueError("control characters such as line breaks are not accepted: leave them out")
    return label


Label = Annotated[str, StringConstraints(min_length=1, max_length=200), AfterValidator(_printable)]
JobState = Literal["accepted", "running", "successful", "failed", "dismissed"]
Priority = Literal["routine", "urgent"]


class ProblemItem(BaseModel):
    """One mistake among several."""

    detail: str
    pointer: str | None = Field(default=None, description="JSON pointer into the body")
    parameter: str | None = Field(default=None, description="name of a query parameter or header field")


class Problem(BaseModel):
    """What went wrong (RFC 9457)."""

    model_config = ConfigDict(extra="allow")

    type: str
    title: str
    status: int
    detail: str
    errors: list[ProblemItem] | None = None


class ScanOut(BaseModel):
    """One scan."""

    id: str
    label: str | None
    title: str | None
    sha256: str
    bytes: int
    created_at: datetime
    axes: dict[str, int]
    sampling: dict[str, Any]
    findings: list[dict[str, Any]]
    state: Literal["ready"]
    caution: str = CAUTION

    @classmethod
    def of(cls, scan: ScanRecord) -> ScanOut:
        """Describe a row."""
        return cls(
            id=scan.id,
            label=scan.label,
            title=scan.title,
            sha256=scan.sha256,
            bytes=scan.bytes,
            created_at=scan.created_at,
            axes=scan.facts["axes"],
            sampling=scan.facts["sampling"],
            findings=scan.facts["findings"],
            state="ready",
        )


class ScanPage(BaseModel):
    """Scans, newest first."""

    items: list[ScanOut]
    next: str | None = Field(description="pass it on as `cursor`; null at the end")


class JobOrder(BaseModel):
    """What to compute."""

    model_config = ConfigDict(extra="forbid")

    kind: Literal["reconstruction"]
    scan: str = Field(description="identifier of a scan")
    mask: None = Field(default=None, description="null: the sampling mask is that of the scan")
    settings: Annotated[Settings, BeforeValidator(parse_settings)] = Settings()
    priority: Priority = "routine"
    label: Label | None = None

    @field_validator("mask", mode="before")
    @classmethod
    def _no_mask(cls, value: object) -> object:
        if value is not None:
            raise ValueError(
                "masks of their own are not known here: write the mask into the scan file and leave null"
            )
        return value


class JobOut(BaseModel):
    """One job."""

    id: str
    kind: Literal["reconstruction"]
    label: str | None
    scan: str
    state: JobState
    stage: str | None = Field(description="what it is doing, or was doing when it failed")
    progress: float = Field(ge=0, le=1, description="fraction of the whole job that is done")
    attempts: int = Field(description="how often it was started")
    priority: Priority
    created_at: datetime
    started_at: datetime | None
    finished_at: datetime | None
    queue_position: int | None = Field(description="1: next to start; null unless it waits")
    estimated_seconds_left: float | None = Field(
        description="from the job's progress and similar jobs; null if unknown"
    )
    settings: dict[str, Any] = Field(description="as resolved, defaults filled in")
    error: dict[str, Any] | None = Field(description="of a failed job: a problem with `stage` and `remedy`")
    caution: str = CAUTION

    @classmethod
    def of(cls, job: JobRecord, estimate: Estimate) -> JobOut:
        """Describe a row; `estimate` is what `Estimates.of` says of it."""
        position, seconds = estimate
        return cls(
            id=job.id,
            kind="reconstruction",
            label=job.label,
            scan=job.scan,
            state=job.state,  # type: ignore[arg-type]
            stage=job.stage,
            progress=job.progress,
            attempts=job.attempts,
            priority=job.priority,  # type: ignore[arg-type]
            created_at=job.created_at,
            started_at=job.started_at,
            finished_at=job.finished_at,
            queue_position=position,
            estimated_seconds_left=None if seconds is None else round(seconds, 1),
            settings=job.settings,
            error=job.error,
        )


class JobPage(BaseModel):
    """Jobs, newest first."""

    items: list[JobOut]
    next: str | None = Field(description="pass it on as `cursor`; null at the end")


class JobEvent(BaseModel):
    """What a running job's event stream tells."""

    id: str
    state: JobState
    stage: str | None
    progress: float
    queue_position: int | None
    estimated_seconds_left: float | None
    caution: str = CAUTION


class Picture(BaseModel):
    """One picture of a result."""

    name: str
    shows: str
    href: str
    bytes: int
    sha256: str


class PictureList(BaseModel):
    """The pictures of a result."""

    items: list[Picture]
    caution: str = CAUTION


class Health(BaseModel):
    """Whether the service lives, and what it can do."""

    status: Literal["live", "ready"]
    version: str
    checks: dict[str, str] | None = None
    workers: int | None = Field(default=None, description="workers heard of lately; 0: jobs wait")
