"""A worker process: takes jobs from the store, computes them, and looks after the jobs of workers that died.

The durable engine (DBOS) hands out workflows, keeps their steps and runs them again. Three things are ours. A job of
many pieces is a workflow that lets others do its steps, so that all workers share it. Each worker beats once a second;
the one that holds the lease lets the jobs of a silent worker be taken again. And a worker that is told to stop ends
after the piece it is at, its jobs left to the others; one whose supervisor has died ends once nothing is left to do.
"""

from __future__ import annotations

import logging
import os
import secrets
import signal
import socket
import sys
import threading
import time
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any, Final

from service.jobs.blobs import Blobs
from service.jobs.database import PATIENT, BeatBook, job_folder, open_engine
from service.jobs.kinds import JobKind, JobStopped
from service.jobs.running import Runner
from service.jobs.store import APPLICATION, JOB_WORKFLOW, JOBS
from service.logs import LOGGER
from service.settings import Settings

if TYPE_CHECKING:
    from dbos import DBOS

__all__ = ["SILENT_SECONDS", "run_worker"]

STEPS: Final = "steps"
STEP_WORKFLOW: Final = "run_step"
SILENT_SECONDS: Final = 6.0  # without a beat, then a worker is taken to be dead
_BEAT_SECONDS: Final = 1.0
_POLL_SECONDS: Final = 0.2  # of the queues; callers who wait do not wait for it
_WAIT_SECONDS: Final = 0.1
_CLEAN_SECONDS: Final = 60.0
_STOP_SECONDS: Final = 10.0  # for the piece at hand when told to stop
_DAY: Final = 86_400.0
_AT_ONCE: Final = 8  # jobs of one worker; most only wait for their steps, and one piece at a time is computed
_VERSION: Final = "jobs-1"  # of the workflows below: change it when a job begun by one cannot be ended by the other
_LIVE: Final = ["PENDING", "ENQUEUED", "DELAYED"]
_OVER: Final = ["SUCCESS", "ERROR", "CANCELLED", "MAX_RECOVERY_ATTEMPTS_EXCEEDED"]


def run_worker(settings: Settings, kinds: Sequence[JobKind], *, supervised: bool) -> None:
    """Work until told to stop by SIGTERM or SIGINT. A ``supervised`` worker also ends, once nothing is left to do, when
    its standard input is closed: its supervisor is gone."""
    _Worker(settings, {kind.name: kind for kind in kinds}, supervised=supervised).run()


class _Worker:
    def __init__(self, settings: Settings, kinds: Mapping[str, JobKind], *, supervised: bool) -> None:
        self._settings = settings
        self._name = f"{socket.gethostname()}-{os.getpid()}-{secrets.token_hex(4)}"  # never shared, never used again
        self._blobs = Blobs(job_folder(settings))
        self._engine = open_engine(settings, patience=PATIENT)
        self._beats = BeatBook(self._engine)
        self._stopping = threading.Event()
        self._runner = Runner(self._blobs, kinds, pause=self._pause)
        self._supervised = supervised
        self._orphan = threading.Event()
        self._failed_beat = -SILENT_SECONDS
        self._cleaned = 0.0

    def run(self) -> None:
        """Start, beat, end. The process is left at once: whatever was not finished is somebody else's by then."""
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, lambda *_: self._stopping.set())
        if self._supervised:
            threading.Thread(target=self._watch_supervisor, name="supervisor", daemon=True).start()
        engine = self._launch()
        LOGGER.info("worker takes jobs", extra={"fields": {"worker": self._name}})
        while not self._stopping.wait(_BEAT_SECONDS):
            self._turn(engine)
            if self._orphan.is_set() and not engine.list_workflows(
                status=_LIVE, limit=1, load_input=False, load_output=False
            ):
                break
        self._stopping.set()
        self._runner.wait_for_piece(_STOP_SECONDS)
        try:
            self._beats.leave(self._name)
        finally:
            logging.shutdown()
            os._exit(0)

    def _launch(self) -> type[DBOS]:
        """Start the durable engine on our queues."""
        from dbos import DBOS, DBOSPortableJSONSerializer

        self._await_store()
        DBOS(
            config={
                "name": APPLICATION,
                "system_database_engine": self._engine,
                "executor_id": self._name,
                "application_version": _VERSION,
                "serializer": DBOSPortableJSONSerializer(),
                "log_level": "CRITICAL",  # it logs a cancelled workflow as an error; what matters we log
            }
        )
        _register(self._runner)
        DBOS.listen_queues([JOBS, STEPS])
        DBOS.launch()
        for queue, at_once in ((JOBS, _AT_ONCE), (STEPS, 2)):  # one step computes, the next is at hand
            DBOS.register_queue(queue, worker_concurrency=at_once, polling_interval_sec=_POLL_SECONDS)
        self._beats.call_ready()
        return DBOS

    def _await_store(self) -> None:
        """Make our table and beat for the first time, before a job can be taken in this worker's name."""
        import sqlalchemy as sa

        while True:
            try:
                self._beats.create()
                self._beats.beat(self._name)
                return
            except (sa.exc.SQLAlchemyError, OSError) as error:
                LOGGER.warning("the store cannot be used yet", extra={"fields": {"reason": str(error)[:200]}})
                if self._stopping.wait(_BEAT_SECONDS):
                    os._exit(0)

    def _turn(self, engine: type[DBOS]) -> None:
        """One beat, and what the holder of the lease does."""
        try:
            self._beats.beat(self._name)
        except Exception as error:
            self._failed_beat = time.monotonic()
            LOGGER.warning("the store does not answer", extra={"fields": {"reason": str(error)[:200]}})
            return
        try:
            if time.monotonic() - self._failed_beat < SILENT_SECONDS:
                return  # the store was away: the others could not beat either
            if self._beats.take_lease(self._name, seconds=SILENT_SECONDS):
                self._take_over(engine)
                if time.monotonic() - self._cleaned > _CLEAN_SECONDS:
                    self._clean(engine)
                    self._cleaned = time.monotonic()
        except Exception as error:
            LOGGER.warning("looking after jobs failed", exc_info=error)

    def _take_over(self, engine: type[DBOS]) -> None:
        """Put what silent workers were at back into its queue."""
        running = engine.list_workflows(status="PENDING", load_input=False, load_output=False)
        if not running:
            return
        alive = self._beats.alive(within=SILENT_SECONDS)
        for one in running:
            if one.executor_id not in alive and one.name in (JOB_WORKFLOW, STEP_WORKFLOW):
                LOGGER.warning("work of a silent worker is taken over", extra={"fields": {"work": one.workflow_id}})
                queue = JOBS if one.name == JOB_WORKFLOW else STEPS
                engine.resume_workflow(one.workflow_id, queue_name=queue)

    def _clean(self, engine: type[DBOS]) -> None:
        """Forget jobs past their time, and files that belong to none."""
        age = 3_600.0 * self._settings.job_retention_hours
        before = datetime.fromtimestamp(time.time() - age, UTC).isoformat()
        about: dict[str, Any] = {"load_input": False, "load_output": False}
        old = engine.list_workflows(name=JOB_WORKFLOW, status=_OVER, end_time=before, limit=500, **about)
        if old:
            engine.delete_workflows([one.workflow_id for one in old], delete_children=True)
            for one in old:
                self._blobs.remove(one.workflow_id)
        for job in self._blobs.older_than(time.time() - age - _DAY):
            if not engine.list_workflows(workflow_ids=[job], **about):
                self._blobs.remove(job)
        self._beats.forget(older=_DAY)

    def _pause(self) -> None:
        """Begin no further piece once told to stop: the workflow stays as it is, for another worker."""
        while self._stopping.is_set():
            time.sleep(_BEAT_SECONDS)

    def _watch_supervisor(self) -> None:
        sys.stdin.buffer.read()
        self._orphan.set()


def _register(runner: Runner) -> None:
    """Make the workflows known to the durable engine, under names that do not change with the code."""
    from dbos import DBOS

    @DBOS.step(name="compute")
    def compute(kind: str, job: str, digest: str, first: int, last: int) -> bool:
        try:
            runner.compute(kind, job, digest, first, last)
        except JobStopped:
            return False
        return True

    @DBOS.workflow(name=STEP_WORKFLOW)
    def run_step(kind: str, job: str, digest: str, first: int, last: int) -> bool:
        return compute(kind, job, digest, first, last)

    @DBOS.workflow(name=JOB_WORKFLOW)
    def run_job(kind: str, job: str, digest: str) -> None:
        try:
            if runner.over(job):
                return
            steps = runner.chunks(kind, job, digest)
            if len(steps) == 1:
                sound = compute(kind, job, digest, *steps[0])
            else:
                others = [DBOS.enqueue_workflow(STEPS, run_step, kind, job, digest, *step) for step in steps]
                sound = all(other.get_result(polling_interval_sec=_WAIT_SECONDS) for other in others)
            if sound:
                runner.finish(kind, job, digest)
        except JobStopped:
            return
        except Exception as error:
            if not runner.over(job):
                LOGGER.error("job failed", exc_info=error, extra={"fields": {"job": job}})
                runner.fail(job)
