"""Parts for tests of the engine: cheap, with behaviour chosen by their payload. Importable on workers."""

import contextlib
import os
import time

import numpy as np

from manybody.workflow.tasks import Task


def run_fake(payload, inputs, report, checkpoint):
    """value = own number + sum of the inputs' values; the other entries of the payload say what happens meanwhile."""
    if log := payload.get("log"):
        hold_back(log)
        # one short append is atomic: the tests count what was computed
        with open(log, "a") as file:
            file.write(f"{payload['name']} {os.getpid()}\n")
    if payload.get("sleep"):
        time.sleep(payload["sleep"])
    if payload.get("error"):
        raise ValueError(payload["error"])
    if (flag := payload.get("die_once")) and not os.path.exists(flag):
        open(flag, "w").close()
        os.kill(os.getpid(), 9)
    if payload.get("die"):
        os.kill(os.getpid(), 9)
    if steps := payload.get("steps"):
        first = int(checkpoint.load() or 0)
        for step in range(first, steps):
            report(step=step)
            while step == payload.get("await_stop") and first <= step and not checkpoint.due():
                time.sleep(0.01)
            if checkpoint.due() or payload.get("save_always"):
                checkpoint.save(str(step + 1).encode().ljust(payload.get("state_bytes", 1)))
        return {"value": float(payload["number"]), "first": first, "steps": steps}
    value = payload["number"] + sum(item["value"] for item in inputs.values())
    rng = np.random.default_rng(payload["number"])
    return {"value": float(value), "array": rng.normal(size=(4, 3)), "threads": os.environ.get("NUMBA_NUM_THREADS", "")}


def hold_back(log):
    """Wait, for ever if need be, while a file `hold` beside the log allows no more parts than the log names."""
    hold = os.path.join(os.path.dirname(log), "hold")
    while os.path.exists(hold):
        with contextlib.suppress(OSError, ValueError), open(hold) as allowed:
            limit = int(allowed.read())
            if not os.path.exists(log):
                return
            with open(log) as file:
                if sum(1 for _ in file) < limit:
                    return
        time.sleep(0.01)


def fake_task(number, kind="quantum", depends=(), seconds=0.01, bytes=1e6, **payload):
    name = f"{kind}-{number}"
    payload = {"number": number, "name": name, **payload}
    return Task(name, kind, name, tuple(depends), payload, seconds, bytes)


def fake_study(points, shared=5, **payload):
    """`points` quantum parts, every `shared` of which need one classical part."""
    tasks = [fake_task(i, "classical", **payload) for i in range((points + shared - 1) // shared)]
    return tasks + [fake_task(i, "quantum", depends=[f"classical-{i // shared}"], **payload) for i in range(points)]
