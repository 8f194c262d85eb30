#!/usr/bin/env python3
"""Set Nightfringe up in this folder and run it. Needs Python 3.11 or newer, and nothing else.

    python3 run.py demo     rehearse a whole night on the stand-in rig, to results and a picture
    python3 run.py test     run the tests
    python3 run.py bench    measure every stated figure beside its reference; build/bench.json
    python3 run.py proof    the long proofs, resumable; build/proof.json
    python3 run.py shell -- ARGS   run the `nightfringe` command from this folder's environment

Everything goes into `.venv/` here (or --venv DIR); nothing outside this folder is changed. What comes after the verb
is passed on. On Windows write `py run.py demo`.
"""

import argparse
import hashlib
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path
from typing import NoReturn

ROOT = Path(__file__).resolve().parent
OLDEST = (3, 11)
ONE_BLAS_THREAD = {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1", "MKL_NUM_THREADS": "1"}


def say(text: str) -> None:
    print(f"run.py: {text}", file=sys.stderr, flush=True)


def stop(text: str) -> NoReturn:
    say(text)
    raise SystemExit(2)


def lock_file(need: str) -> Path:
    """The lock of this Python minor for `need` ("run" or "dev"); a newer Python takes the newest lock there is."""
    exact = ROOT / ".locks" / f"py{sys.version_info[0]}.{sys.version_info[1]}-{need}.txt"
    if exact.exists():
        return exact
    locks = sorted(
        (ROOT / ".locks").glob(f"py3.*-{need}.txt"), key=lambda path: int(path.name.split(".")[1].split("-")[0])
    )
    if not locks:
        stop("the lock files in .locks/ are missing: this is not a whole copy of Nightfringe")
    say(f"no lock file for Python {sys.version_info[0]}.{sys.version_info[1]}; trying {locks[-1].name}")
    return locks[-1]


def environment_key() -> str:
    """Names the environment by what it depends on, so that an old one is never taken for a new one."""
    parts = [
        lock_file("run").read_bytes(),
        lock_file("dev").read_bytes(),
        sys.version.encode(),
        sys.executable.encode(),
    ]
    return hashlib.sha256(b"\0".join(parts)).hexdigest()[:12]


def environment_python(folder: Path) -> Path:
    return folder / ("Scripts/python.exe" if os.name == "nt" else "bin/python")


def create_environment(folder: Path) -> None:
    if shutil.which(str(environment_python(folder))) and (folder / "created").exists():
        return
    say(f"making a virtual environment in {folder}")
    made = subprocess.run([sys.executable, "-m", "venv", "--clear", str(folder)], capture_output=True, text=True)
    if made.returncode != 0:
        minor = f"{sys.version_info[0]}.{sys.version_info[1]}"
        stop(
            f"{sys.executable} could not make a virtual environment:\n{(made.stdout + made.stderr).strip()}\n"
            f"On Debian and Ubuntu: apt-get install python{minor}-venv. Elsewhere: use a Python from python.org."
        )
    site = subprocess.run(
        [str(environment_python(folder)), "-c", "import sysconfig; print(sysconfig.get_paths()['purelib'])"],
        check=True,
        capture_output=True,
        text=True,
    ).stdout.strip()
    (Path(site) / "nightfringe_checkout.pth").write_text(f"{ROOT}\n", encoding="utf-8")
    (folder / "created").write_text("", encoding="utf-8")


def install(folder: Path, need: str, wheelhouse: str | None) -> None:
    """Install the locked packages, hashes checked; the stamp is written last, so half an install is done again."""
    stamp = folder / f"installed-{need}"
    if stamp.exists():
        return
    lock = lock_file(need)
    command = [str(environment_python(folder)), "-m", "pip", "install", "--disable-pip-version-check", "--quiet"]
    command += ["--require-hashes", "--only-binary", ":all:", "-r", str(lock)]
    if wheelhouse:
        command += ["--no-index", "--find-links", wheelhouse]
    began = time.monotonic()
    say(f"installing what {lock.name} lists (once; a minute or so)")
    if subprocess.run(command).returncode != 0:
        stop(
            "the install failed (pip's words stand above). Without a network, collect the wheels elsewhere with "
            f"`pip download -r {lock.relative_to(ROOT)} -d DIR` and call run.py with --wheelhouse DIR"
        )
    stamp.write_text("", encoding="utf-8")
    say(f"installed in {time.monotonic() - began:.0f} s")


def command_for(verb: str, python: str, rest: list[str]) -> list[str]:
    if verb == "demo":
        night = [str(ROOT / "sequences" / "hold-scan.toml"), "--folder", str(ROOT / "build" / "demo"), "--fresh"]
        return [python, "-m", "planner", "rehearse", *night, *rest]
    if verb == "test":
        workers = str(max(1, min(4, os.cpu_count() or 1)))
        return [python, "-m", "pytest", "-n", workers, *rest]
    if verb == "shell":
        return [python, "-m", "planner", *rest]
    return [python, "-m", "tests.figures", verb, *rest]


def main() -> int:
    if sys.version_info < OLDEST:
        stop(f"this is Python {sys.version.split()[0]}; Nightfringe needs {OLDEST[0]}.{OLDEST[1]} or newer")
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("verb", choices=["demo", "test", "bench", "proof", "shell"])
    parser.add_argument("--venv", metavar="DIR", help="where the environment goes (default: .venv here)")
    parser.add_argument("--wheelhouse", metavar="DIR", help="install from wheels in this folder, without a network")
    args, rest = parser.parse_known_args()
    if rest[:1] == ["--"]:
        rest = rest[1:]
    folder = Path(args.venv or ROOT / ".venv").resolve() / environment_key()
    create_environment(folder)
    install(folder, "run" if args.verb in ("demo", "shell") else "dev", args.wheelhouse)
    where = None if args.verb == "shell" else ROOT
    command = command_for(args.verb, str(environment_python(folder)), rest)
    try:
        return subprocess.run(command, cwd=where, env={**os.environ, **ONE_BLAS_THREAD}).returncode
    except KeyboardInterrupt:
        return 130


if __name__ == "__main__":
    sys.exit(main())
