"""The real service in a process of its own, for tests."""

import json
import subprocess
import sys
import urllib.error
import urllib.request
from pathlib import Path
from typing import Self

from broker import free_port, wait_for


class Service:
    """`quietmill run` on a settings file; its log gathers in a file beside it."""

    def __init__(self, config: Path, port: int) -> None:
        self.config = config
        self.port = port
        self.log_file = config.with_suffix(".log")
        self.process: subprocess.Popen[bytes] | None = None

    @classmethod
    def of(
        cls, folder: Path, broker_url: str, characteristics: str, broker: str = "", name: str = "quietmill"
    ) -> "Service":
        """Write the settings of a service; `characteristics` and `broker` are YAML in flow style."""
        port = free_port()
        config = folder / f"{name}.yaml"
        config.write_text(
            f"broker: {{url: '{broker_url}', client_id: {name}{broker}}}\n"
            f"web: {{listen: '127.0.0.1:{port}'}}\n"
            f"characteristics: {characteristics}\n"
        )
        return cls(config, port)

    def start(self, ready: bool = True) -> Self:
        with self.log_file.open("ab") as log:
            command = [sys.executable, "-m", "quietmill", "run", str(self.config)]
            self.process = subprocess.Popen(command, stdout=log, stderr=log)
        if ready:
            wait_for(lambda: self.get("/readyz")[0] == 200, what="the service to be ready")
        return self

    def get(self, path: str) -> tuple[int, str]:
        """Return status and text of a page; 0 while nobody answers."""
        assert self.process is None or self.process.poll() is None, self.log_file.read_text()
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{self.port}{path}", timeout=10) as answer:
                return answer.status, answer.read().decode()
        except urllib.error.HTTPError as error:
            with error:
                return error.code, error.read().decode()
        except OSError:
            return 0, ""

    def metric(self, line: str) -> float:
        """Return the value of the sample whose name and labels are `line`; NaN where there is none."""
        for sample in self.get("/metrics")[1].splitlines():
            name, _, value = sample.rpartition(" ")
            if name == line:
                return float(value)
        return float("nan")

    def accepted(self) -> float:
        return self.metric('quietmill_readings_total{outcome="accepted"}')

    def log(self) -> list[dict]:
        return [json.loads(line) for line in self.log_file.read_text().splitlines() if line.startswith("{")]

    def stop(self) -> int:
        """End with SIGTERM; return the exit code."""
        assert self.process is not None
        self.process.terminate()
        code = self.process.wait(20)
        self.process = None
        return code

    def kill(self) -> None:
        assert self.process is not None
        self.process.kill()
        self.process.wait(20)
        self.process = None

    def __enter__(self) -> Self:
        return self.start()

    def __exit__(self, *_: object) -> None:
        if self.process is not None:
            self.kill()
