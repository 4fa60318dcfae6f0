"""What ``ballbal checkup`` finds on this machine: real-time permission, processor, and what the bus is set to."""

from __future__ import annotations

import os
import resource
import shutil
from collections.abc import Mapping
from pathlib import Path

from ballbal_ros.findings import LOOK, OK, WRONG, Finding

_MACHINE, _BUS = "machine", "bus"
_PRIORITY = 80
_IPC_LOCK = 14
_ENOUGH_MEMORY = 1 << 30
_SHARED = Path("/dev/shm")
_ENOUGH_SHARED = 64 << 20
_GOVERNORS = "/sys/devices/system/cpu"
HERE_ONLY = ("LOCALHOST", "OFF")
_RANGE = "ROS_AUTOMATIC_DISCOVERY_RANGE"


def check_machine() -> list[Finding]:
    """Look at what real-time needs. Nothing is changed."""
    return [_fifo(_fifo_refusal()), _memory(*_lockable()), _governors(_read_governors()), _load(os.getloadavg()[1])]


def _fifo_refusal() -> str:
    """Why SCHED_FIFO is not granted to this user; "" where it is. Tried on this thread for an instant."""
    policy, before = os.sched_getscheduler(0), os.sched_getparam(0)
    try:
        os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(_PRIORITY))
    except OSError as error:
        return error.strerror or str(error)
    os.sched_setscheduler(0, policy, before)
    return ""


def _fifo(refusal: str) -> Finding:
    if not refusal:
        return Finding(_MACHINE, "SCHED_FIFO", OK, f"granted, priority {_PRIORITY} tried")
    do = "for a robot: 'rtprio 90' for this user in /etc/security/limits.d, log in anew, set realtime_priority"
    return Finding(_MACHINE, "SCHED_FIFO", LOOK, f"not granted: {refusal.lower()}", do)


def _lockable() -> tuple[int, bool]:
    """(bytes that may be locked, -1 for no limit; whether this process may lock beyond)."""
    limit = resource.getrlimit(resource.RLIMIT_MEMLOCK)[0]
    lines = Path("/proc/self/status").read_text(encoding="ascii", errors="replace").splitlines()
    mine = next((int(line.split()[1], 16) for line in lines if line.startswith("CapEff:")), 0)
    return limit, bool(mine >> _IPC_LOCK & 1)


def _memory(limit: int, privileged: bool) -> Finding:
    if privileged or limit < 0 or limit >= _ENOUGH_MEMORY:
        what = "no limit" if privileged or limit < 0 else f"up to {limit >> 20} MiB"
        return Finding(_MACHINE, "locked memory", OK, what)
    do = "for a robot: 'memlock unlimited' for this user in /etc/security/limits.d, log in anew"
    return Finding(_MACHINE, "locked memory", LOOK, f"only {limit >> 10} KiB: a node's memory can't be locked", do)


def _read_governors() -> set[str]:
    found = set()
    for path in Path(_GOVERNORS).glob("cpu[0-9]*/cpufreq/scaling_governor"):
        try:
            found.add(path.read_text(encoding="ascii").strip())
        except OSError:
            continue
    return found


def _governors(found: set[str]) -> Finding:
    if not found:
        return Finding(_MACHINE, "CPU governor", OK, "can't be read here (a virtual machine, or set by the firmware)")
    what = ", ".join(sorted(found))
    if found == {"performance"}:
        return Finding(_MACHINE, "CPU governor", OK, what)
    do = "ticks come late while a core wakes up: set performance (cpupower frequency-set -g performance)"
    return Finding(_MACHINE, "CPU governor", LOOK, what, do)


def _load(load: float) -> Finding:
    cores = len(os.sched_getaffinity(0))
    what = f"{load:.1f} running on {cores} cores, mean of 5 minutes"
    if cores < 2 or load > cores:
        return Finding(_MACHINE, "processor", LOOK, what, "stop what is not needed, or give the loop a core of its own")
    return Finding(_MACHINE, "processor", OK, what)


def check_bus(environment: Mapping[str, str], domain: int) -> list[Finding]:
    """Look at the bus settings of this shell; ``domain`` is the ROS domain that is looked into."""
    return [_range(environment), _domain(domain), _security(environment), _shared_memory()]


def _range(environment: Mapping[str, str]) -> Finding:
    given, peers = environment.get(_RANGE, ""), environment.get("ROS_STATIC_PEERS", "")
    here = "LOCALHOST" if not given else given.upper()
    if peers:
        do = f"unset ROS_STATIC_PEERS unless these machines may command the robot; see docs/security.md (range {here})"
        return Finding(_BUS, "reach", LOOK, f"ROS_STATIC_PEERS names {peers}: they can talk to the robot", do)
    if environment.get("ROS_LOCALHOST_ONLY") == "1" or here in HERE_ONLY:
        told = f"{_RANGE}={given}" if given else f"{_RANGE} is not set: our nodes take LOCALHOST"
        return Finding(_BUS, "reach", OK, f"this machine only ({told})")
    do = f"set {_RANGE}=LOCALHOST, or run with keystores: docs/security.md"
    return Finding(_BUS, "reach", LOOK, f"{_RANGE}={given}: whoever is in the network can command the robot", do)


def _domain(domain: int) -> Finding:
    if domain > 101:
        do = "its ports may be taken by other programs on Linux: use 1 to 101"
        return Finding(_BUS, "domain", LOOK, f"ROS_DOMAIN_ID {domain}", do)
    if domain == 0:
        do = "every ROS program without a domain of its own is in it: give the robot one from 1 to 101"
        return Finding(_BUS, "domain", LOOK, "ROS_DOMAIN_ID 0, the default", do)
    return Finding(_BUS, "domain", OK, f"ROS_DOMAIN_ID {domain}")


def _security(environment: Mapping[str, str]) -> Finding:
    on = environment.get("ROS_SECURITY_ENABLE", "").lower() == "true"
    if not on:
        return Finding(_BUS, "security", OK, "off: the bus trusts every program on this machine (docs/security.md)")
    keystore = environment.get("ROS_SECURITY_KEYSTORE", "")
    if not keystore or not Path(keystore).is_dir():
        do = "set ROS_SECURITY_KEYSTORE to the keystore's folder"
        return Finding(_BUS, "security", WRONG, f"on, but the keystore {keystore or '(none)'} is not there", do)
    if environment.get("ROS_SECURITY_STRATEGY", "") != "Enforce":
        do = "set ROS_SECURITY_STRATEGY=Enforce: otherwise a node without keys runs unprotected"
        return Finding(_BUS, "security", LOOK, "on, but not enforced", do)
    return Finding(_BUS, "security", OK, f"on and enforced, keystore {keystore}")


def _shared_memory() -> Finding:
    if not _SHARED.is_dir():
        return Finding(_BUS, "shared memory", OK, f"no {_SHARED}: messages go by the loopback network")
    free = shutil.disk_usage(_SHARED).free
    if free < _ENOUGH_SHARED:
        do = f"make room in {_SHARED}: segments of processes that were killed may be left there"
        return Finding(_BUS, "shared memory", LOOK, f"only {free >> 20} MiB free in {_SHARED}", do)
    return Finding(_BUS, "shared memory", OK, f"{free >> 20} MiB free in {_SHARED}")
