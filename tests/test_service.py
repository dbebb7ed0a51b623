"""The unit for the service manager: every key is one that exists, its command is ours, its limits let it work."""

from __future__ import annotations

import os
import re
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner
from driftwatch.cli import COMMANDS, main
from driftwatch.daemon.notify import WAITING_FACTOR
from driftwatch.daemon.restarts import LONGEST_S

UNIT = Path(__file__).parent.parent / "config" / "driftwatch.service"

KNOWN = {
    "Unit": """
        Description Documentation Wants Requires Requisite BindsTo PartOf Conflicts Before After OnFailure OnSuccess
        StartLimitIntervalSec StartLimitBurst StartLimitAction ConditionPathExists AssertPathExists DefaultDependencies
        RequiresMountsFor
    """,
    "Service": """
        Type ExitType RemainAfterExit GuessMainPID PIDFile BusName ExecStart ExecStartPre ExecStartPost ExecCondition
        ExecReload ExecStop ExecStopPost RestartSec RestartSteps RestartMaxDelaySec TimeoutStartSec TimeoutStopSec
        TimeoutAbortSec TimeoutSec RuntimeMaxSec WatchdogSec Restart SuccessExitStatus RestartPreventExitStatus
        RestartForceExitStatus RootDirectoryStartOnly NonBlocking NotifyAccess Sockets FileDescriptorStoreMax OOMPolicy
        KillMode KillSignal RestartKillSignal SendSIGHUP SendSIGKILL FinalKillSignal WatchdogSignal
        WorkingDirectory RootDirectory ProtectProc ProcSubset BindPaths BindReadOnlyPaths User Group DynamicUser
        SupplementaryGroups CapabilityBoundingSet AmbientCapabilities NoNewPrivileges SecureBits LimitCORE LimitNOFILE
        LimitRTPRIO LimitMEMLOCK UMask CoredumpFilter KeyringMode OOMScoreAdjust Nice CPUSchedulingPolicy
        CPUSchedulingPriority CPUAffinity IOSchedulingClass IOSchedulingPriority ProtectSystem ProtectHome
        RuntimeDirectory StateDirectory CacheDirectory LogsDirectory ConfigurationDirectory RuntimeDirectoryMode
        StateDirectoryMode CacheDirectoryMode LogsDirectoryMode ConfigurationDirectoryMode ReadWritePaths ReadOnlyPaths
        InaccessiblePaths ExecPaths NoExecPaths PrivateTmp PrivateDevices PrivateNetwork PrivateIPC PrivateUsers
        ProtectHostname ProtectClock ProtectKernelTunables ProtectKernelModules ProtectKernelLogs ProtectControlGroups
        RestrictAddressFamilies RestrictFileSystems RestrictNamespaces LockPersonality MemoryDenyWriteExecute
        RestrictRealtime RestrictSUIDSGID RemoveIPC MountFlags SystemCallFilter SystemCallErrorNumber
        SystemCallArchitectures SystemCallLog Environment EnvironmentFile PassEnvironment UnsetEnvironment
        StandardInput StandardOutput StandardError SyslogIdentifier SyslogLevel
        CPUWeight CPUQuota MemoryMin MemoryLow MemoryHigh MemoryMax TasksMax IOWeight IPAddressAllow IPAddressDeny
        DevicePolicy DeviceAllow Slice Delegate
    """,
    "Install": "Alias WantedBy RequiredBy Also DefaultInstance",
}
"""Keys of systemd.unit(5), systemd.service(5), systemd.exec(5), systemd.kill(5), systemd.resource-control(5), from
memory and not all of them; where systemd-analyze is installed it is asked as well."""


def settings() -> list[tuple[str, str, str]]:
    """Return section, key and value of each line that says something."""
    found, section = [], ""
    for line in UNIT.read_text(encoding="utf-8").splitlines():
        if not line or line.startswith("#"):
            continue
        if heading := re.fullmatch(r"\[(\w+)\]", line):
            section = heading[1]
            continue
        key, is_setting, value = line.partition("=")
        assert is_setting, line
        found.append((section, key, value))
    return found


SET = {key: value for _, key, value in settings()}


def test_every_key_exists_in_its_section_and_stands_once() -> None:
    unknown = [(section, key) for section, key, _ in settings() if key not in KNOWN[section].split()]
    assert unknown == []
    assert len(SET) == len(settings())
    assert {section for section, _, _ in settings()} == set(KNOWN)


def test_the_command_is_ours_and_its_options_are_known() -> None:
    program, command, *arguments = shlex.split(SET["ExecStart"])
    assert Path(program).is_absolute()
    assert Path(program).name == "driftwatch"
    assert command in COMMANDS
    done = CliRunner().invoke(main, [command, *arguments])
    assert done.exit_code == 2
    assert "/etc/driftwatch/driftwatch.toml: got no such file" in done.stderr, "it came as far as its file"


def test_a_wrong_configuration_is_the_exit_status_that_is_not_restarted() -> None:
    done = CliRunner().invoke(main, ["run", str(UNIT)])
    assert str(done.exit_code) == SET["RestartPreventExitStatus"]


def test_the_watchdog_leaves_time_to_open_a_device_again_and_to_wait_for_one() -> None:
    """Samples flow within 5 s of the end of a cause; attempts are so frequent that each wait is renewed."""
    interval_s = float(SET["WatchdogSec"])
    assert interval_s >= 6 * 5.0
    assert WAITING_FACTOR * interval_s > 10 * LONGEST_S + interval_s / 4
    assert SET["Type"] == "notify"
    assert SET["NotifyAccess"] == "main"


def test_every_promise_of_hardening_is_kept() -> None:
    for key, value in {
        "NoNewPrivileges": "yes",
        "ProtectSystem": "strict",
        "ProtectHome": "yes",
        "PrivateTmp": "yes",
        "CapabilityBoundingSet": "",
        "DeviceAllow": "char-alsa rw",
        "DevicePolicy": "closed",
        "StateDirectory": "driftwatch",
        "SystemCallFilter": "@system-service adjtimex clock_adjtime",
        "KillMode": "mixed",
        "Restart": "on-failure",
    }.items():
        assert SET[key] == value, key
    assert SET["User"] not in ("", "root")
    assert "PrivateDevices" not in SET, "it would hide the sound devices"


def test_the_service_manager_finds_nothing_wrong_with_it(tmp_path: Path) -> None:
    """Asked about a copy that names the program as it is installed here; the key list above is from memory."""
    analyze = shutil.which("systemd-analyze")
    program = Path(sys.executable).with_name("driftwatch")
    if analyze is None or not program.is_file():
        pytest.skip("systemd-analyze is not installed" if analyze is None else f"{program} is not there")
    unit = tmp_path / UNIT.name
    text = UNIT.read_text(encoding="utf-8")
    unit.write_text(text.replace(shlex.split(SET["ExecStart"])[0], str(program)), encoding="utf-8")
    done = subprocess.run(
        [analyze, "verify", "--man=no", str(unit)],
        env={"PATH": os.environ["PATH"], "HOME": str(tmp_path), "SYSTEMD_LOG_LEVEL": "warning"},
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert [line for line in done.stderr.splitlines() if UNIT.name in line] == []
    assert done.returncode == 0, done.stderr


# ---------------------------------------------------------------------------------------------- what it must not refuse


@pytest.mark.skipif(sys.platform != "linux" or os.uname().machine != "x86_64", reason="a filter for Linux on x86-64")
@pytest.mark.parametrize("without", [None, "AF_NETLINK"])
def test_the_bus_binds_with_the_families_that_are_allowed_and_needs_each(without: str | None) -> None:
    """Under a filter of the kernel as the unit sets it: why AF_NETLINK stands there is shown by leaving it out."""
    families = [name for name in SET["RestrictAddressFamilies"].split() if name != without]
    program = f"""
import ctypes, socket, struct
libc = ctypes.CDLL(None, use_errno=True)
families = [getattr(socket, name) for name in {families!r}]
LOAD, EQUAL, RETURN = 0x20, 0x15, 0x06  # steps of a packet filter
steps = [(LOAD, 0, 0, 0), (EQUAL, 0, len(families) + 2, 41), (LOAD, 0, 0, 16)]  # 41: socket(2) on x86-64
steps += [(EQUAL, len(families) - index, 0, int(family)) for index, family in enumerate(families)]
steps += [(RETURN, 0, 0, 0x00050000 | 97), (RETURN, 0, 0, 0x7FFF0000)]  # "family not supported", or go on
code = ctypes.create_string_buffer(b"".join(struct.pack("HBBI", *step) for step in steps))
class Program(ctypes.Structure):
    _fields_ = [("length", ctypes.c_ushort), ("steps", ctypes.c_void_p)]
assert libc.prctl(38, 1, 0, 0, 0) == 0  # no new privileges, without which no filter is taken
assert libc.prctl(22, 2, ctypes.byref(Program(len(steps), ctypes.addressof(code))), 0, 0) == 0
from driftwatch.bus.publisher import Publisher
publisher = Publisher("tcp://127.0.0.1:*")
print("bound")
"""
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, timeout=60, check=False)
    if without is None:
        assert (done.returncode, done.stdout) == (0, "bound\n"), done.stderr
    else:
        assert "bound" not in done.stdout
        assert "Address family not supported" in done.stderr
