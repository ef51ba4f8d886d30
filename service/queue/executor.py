"""The side of the queue that carries jobs out: the engine claims a job, `JobRunner` does the rest."""

from __future__ import annotations

import logging
import threading

from dbos import DBOS

from service.queue.attempt import JobRunner, Stopped
from service.queue.engine import QUEUE, WORKFLOW, open_client, quieten, worker_config
from service.settings import ServiceSettings
from service.store.database import make_engine

log = logging.getLogger("fallow")

_IDLE_SECONDS = 8.0


class Executor:
    """The engine of one worker process; there is one in a process.

    Parameters
    ----------
    name : str
        Unique among living workers and the same after a restart.
    """

    def __init__(self, settings: ServiceSettings, runner: JobRunner, name: str) -> None:
        self._runner = runner
        self._engine = make_engine(settings.queue_url)
        self._given_back: list[str] = []
        self._busy = 0
        self._changed = threading.Condition()
        quieten()
        DBOS(config=worker_config(settings, self._engine, name))

        def run_job(job_id: str) -> None:
            self._carry_out(job_id)

        DBOS.workflow(name=WORKFLOW)(run_job)
        DBOS.listen_queues([QUEUE])

    def start(self) -> None:
        """Begin to claim jobs; those that died with an earlier process of this name come first."""
        DBOS.launch()
        quieten()

    def stop(self) -> None:
        """Stop claiming jobs and give the running one back.

        The process must end afterwards without waiting for its threads: the engine's thread of a job that was given
        back never returns, since to return would be to report the job as done.
        """
        self._runner.stop()
        with self._changed:
            self._changed.wait_for(lambda: self._busy == 0, timeout=_IDLE_SECONDS)
        DBOS.destroy()
        client = open_client(self._engine)
        for job_id in self._given_back:
            client.resume_workflow(job_id, queue_name=QUEUE)
        client.destroy()

    def _carry_out(self, job_id: str) -> None:
        with self._changed:
            self._busy += 1
        try:
            self._runner.run(job_id)
        except Stopped:
            self._given_back.append(job_id)
        except Exception:
            # The row stays as it is: the sweep ends it, or another attempt does.
            log.exception("job %s: the worker failed", job_id)
            raise
        finally:
            with self._changed:
                self._busy -= 1
                self._changed.notify_all()
        if job_id in self._given_back:
            threading.Event().wait()
