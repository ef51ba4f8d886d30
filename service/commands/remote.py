"""`fallow submit`, `jobs`, `job`, `collect` and `dismiss`: what is asked of a service."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.commands.failures import ExitCode
from service.commands.output import note, print_caution, print_facts, print_json, print_table, read_settings

if TYPE_CHECKING:
    from service.client import Client, Job

    _Commands = argparse._SubParsersAction[argparse.ArgumentParser]

_STATES = ("accepted", "running", "successful", "failed", "dismissed")


def add_commands(commands: _Commands) -> None:
    """Add all of them to the parser."""
    submit = commands.add_parser("submit", help="send a scan to the service and ask for its image")
    submit.add_argument("scan", type=Path, metavar="SCAN", help="scan file (HDF5)")
    submit.add_argument(
        "--settings", type=Path, metavar="FILE.json", help="settings that differ from the defaults"
    )
    submit.add_argument("--label", help="a name of your own for scan and job")
    submit.add_argument(
        "--priority", choices=("routine", "urgent"), default="routine", help="default: %(default)s"
    )
    submit.add_argument("--wait", action="store_true", help="wait until the job is done")
    jobs = commands.add_parser("jobs", help="list your jobs, newest first")
    jobs.add_argument("--label", help="those of one label only")
    jobs.add_argument("--state", choices=_STATES, help="those in one state only")
    jobs.add_argument(
        "--limit", type=_limit, default=50, metavar="N", help="that many at most (default: %(default)s)"
    )
    job = commands.add_parser("job", help="show one job")
    collect = commands.add_parser(
        "collect", help="fetch image.h5, report.json and image.png of a finished job"
    )
    collect.add_argument(
        "-o", "--output", type=Path, required=True, metavar="DIR", help="folder for the three files"
    )
    dismiss = commands.add_parser("dismiss", help="end a waiting or running job")
    for command in (job, collect, dismiss):
        command.add_argument("id", metavar="ID", help="identifier of the job")
    runs = {submit: run_submit, jobs: run_jobs, job: run_job, collect: run_collect, dismiss: run_dismiss}
    for command, run in runs.items():
        command.add_argument("--url", help="address of the service (default: FALLOW_URL, or this machine)")
        command.add_argument(
            "--token",
            help="access token, which the process list shows to others: better FALLOW_TOKEN, or the local data "
            "folder's (the defaults)",
        )
        command.add_argument("--json", action="store_true", help="print JSON for scripts")
        command.set_defaults(run=run)


def run_submit(arguments: argparse.Namespace) -> int:
    """Send a scan, ask for its image, and wait for it when told so."""
    from recon.settings import parse_settings

    settings = read_settings(arguments.settings)
    # Before anything is sent: a refused order would leave its scan with the service.
    parse_settings(settings)
    with _client(arguments) as client:
        job = client.submit(
            arguments.scan, settings, label=arguments.label, priority=arguments.priority, progress=True
        )
        if arguments.wait:
            note(f"job {job.id}")
            try:
                job.wait(progress=True)
            except KeyboardInterrupt:
                note(f"The job goes on; end it with `fallow dismiss {job.id}`.")
                raise
        _print_job(job, arguments.json)
        if not arguments.json:
            done = "collect it with" if job.state == "successful" else "when it is done, collect it with"
            note(f"{done} `fallow collect {job.id} -o DIR`")
    return ExitCode.DONE


def run_jobs(arguments: argparse.Namespace) -> int:
    """List jobs."""
    with _client(arguments) as client:
        jobs = list(islice(client.jobs(label=arguments.label, state=arguments.state), arguments.limit))
    if arguments.json:
        print_json({"items": [job.facts for job in jobs]})
        return ExitCode.DONE
    if not jobs:
        print("no jobs")
        return ExitCode.DONE
    print_table(
        ("id", "state", "done", "label", "created"),
        (
            (
                job.id,
                job.state,
                f"{100 * job.progress:.0f} %",
                job.facts.get("label") or "",
                str(job.facts["created_at"]),
            )
            for job in jobs
        ),
    )
    print_caution(jobs[0].facts["caution"])
    return ExitCode.DONE


def run_job(arguments: argparse.Namespace) -> int:
    """Show one job."""
    with _client(arguments) as client:
        _print_job(client.job(arguments.id), arguments.json)
    return ExitCode.DONE


def run_collect(arguments: argparse.Namespace) -> int:
    """Fetch the results of a finished job."""
    from service.client import JobFailed

    with _client(arguments) as client:
        job = client.job(arguments.id)
        if job.is_finished and job.state != "successful":
            raise JobFailed(job.id, job.state, job.facts.get("error"))
        paths = job.save(arguments.output)
    if arguments.json:
        print_json({"id": job.id, "files": [str(path) for path in paths], "caution": job.facts["caution"]})
        return ExitCode.DONE
    for path in paths:
        print(path)
    print_caution(job.facts["caution"])
    return ExitCode.DONE


def run_dismiss(arguments: argparse.Namespace) -> int:
    """End a job."""
    with _client(arguments) as client:
        _print_job(client.dismiss(arguments.id), arguments.json)
    return ExitCode.DONE


def _client(arguments: argparse.Namespace) -> Client:
    from service.client import Client

    return Client(arguments.url, arguments.token)


def _print_job(job: Job, as_json: bool) -> None:
    if as_json:
        print_json(job.facts)
        return
    facts: Mapping[str, Any] = job.facts
    print_facts(
        {
            "job": job.id,
            "state": job.state,
            "label": facts.get("label"),
            "scan": facts.get("scan"),
            "stage": None if job.is_finished else job.stage,
            "progress": f"{100 * job.progress:.0f} %",
            "queue position": facts.get("queue_position"),
            "created": facts.get("created_at"),
            "started": facts.get("started_at"),
            "finished": facts.get("finished_at"),
            "error": _error(facts.get("error")),
        }
    )
    print_caution(str(facts["caution"]))


def _error(problem: Mapping[str, Any] | None) -> str | None:
    from service.client.errors import sentence

    return sentence(problem) if problem else None


def _limit(text: str) -> int:
    if not text.isdecimal() or int(text) == 0:
        raise argparse.ArgumentTypeError(f"expected a whole number of at least 1, received {text!r}")
    return int(text)
