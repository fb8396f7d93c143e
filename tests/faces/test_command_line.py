"""The commands' outer contract: help, exit codes, schema, and what a start does not load."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

from meterfix.store.lock import WriterLock
from meterfix.store.opening import lock_file

COMMANDS = ("demo", "check", "process", "show", "verify")


def in_a_process(*arguments, **options):
    """Run the command line as a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "meterfix", *map(str, arguments)],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
        **options,
    )


@pytest.mark.parametrize("command", COMMANDS)
def test_help_holds_an_example(invoke, command):
    """`meterfix COMMAND --help` shows how the command is called."""
    text = invoke(command, "--help").stdout
    assert f"Example: meterfix {command}" in " ".join(text.split())


def test_help_names_every_command_and_the_exit_codes(invoke):
    """`meterfix --help` lists the commands that exist and what the exit codes mean."""
    text = " ".join(invoke("--help").stdout.split())
    assert [line for line in COMMANDS if f" {line} " not in text] == []
    assert "0 done" in text
    assert "2 arguments, site file or ledger unusable" in text


def test_help_loads_nothing_heavy():
    """Asking for help does not wait for the libraries that the work needs."""
    code = (
        "import sys\n"
        "from meterfix.faces.commands import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'pandas', 'CoolProp', 'sqlalchemy', 'pint', 'pyarrow', 'pydantic',\n"
        "         'alembic', 'rich'} & set(sys.modules)\n"
        "sys.exit(f'loaded: {sorted(heavy)}' if heavy else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_the_schema_is_a_json_schema_and_loads_no_gas_model():
    """`check --schema` prints a JSON Schema that names the site file's tables, at once."""
    code = (
        "import sys\n"
        "from meterfix.faces.commands import main\n"
        "try:\n    main(['check', '--schema'])\n"
        "except SystemExit as end:\n    assert not end.code\n"
        "assert not {'CoolProp', 'numpy', 'sqlalchemy'} & set(sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    schema = json.loads(done.stdout)
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert schema["type"] == "object"
    assert set(schema["properties"]) == {
        "site", "contract", "source", "signal", "gas", "meter", "envelope", "uncertainty"
    }  # fmt: skip
    assert {"site", "source", "signal", "gas", "meter"} <= set(schema["required"])


def test_a_good_site_file_is_told_so(works, invoke):
    """`check` says what a usable file holds, and exits with 0; as text and as JSON."""
    text = invoke("check", "--site", works.site).stdout
    assert "usable" in text
    assert "11 meters" in text
    found = json.loads(invoke("check", "--site", works.site, "--format", "json").stdout)
    assert (found["usable"], found["mistakes"], found["meters"]) == (True, [], 11)


@pytest.mark.parametrize("command", [("check",), ("process",), ("show", "totals"), ("verify",)])
def test_a_missing_site_file_is_exit_2(tmp_path, invoke, command):
    """Every command says in a sentence that there is no such file, and makes none."""
    missing = tmp_path / "nowhere.toml"
    result = invoke(*command, "--site", missing, exit_code=2)
    assert "nowhere.toml" in result.stderr
    assert "No such file" in result.stderr
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("process", "--now", "yesterday"), "is not a date"),
        (("process", "--now", "2026-10-04T09:00:00"), "no offset"),
        (("process", "--now", "2026-10-04"), "needs a time"),
        (("show", "totals", "--from", "2026-13-01"), "is not a date"),
        (("show", "totals", "--by", "week"), "'week' is not one of"),
        (("show", "files", "--by", "hour"), "--by goes with totals, balances and budget"),
        (("show", "budget", "--by", "hour"), "per gas day and month, not per hour"),
        (("show", "passes", "--meter", "FT-101"), "does not go with passes"),
        (("show", "totals", "--meter", "FT-999"), "no meter 'FT-999'; there are FA-401"),
        (("show", "balances", "--meter", "FT-999"), "no meter 'FT-999'"),
        (("show", "nothing"), "'nothing' is not one of"),
        (("show",), "Missing argument"),
        (("explode",), "No such command"),
    ],
)
def test_bad_arguments_are_exit_2(works, invoke, arguments, said):
    """What cannot be meant is refused with a sentence, and nothing is done."""
    site = () if arguments[0] == "explode" else ("--site", works.site)
    result = invoke(*arguments, *site, exit_code=2)
    assert said in " ".join(result.stderr.split())


@pytest.mark.parametrize("what", ["totals", "balances", "budget", "alerts", "files", "passes"])
def test_show_before_the_first_process(one_meter, invoke, what):
    """Without a ledger `show` says so, exits with 2 and makes no file."""
    before = sorted(one_meter.path.rglob("*"))
    result = invoke("show", what, "--site", one_meter.site, exit_code=2)
    assert "no ledger" in result.stderr
    assert "processing logs makes one" in result.stderr
    assert sorted(one_meter.path.rglob("*")) == before


def test_verify_before_the_first_process(one_meter, invoke):
    """Without a ledger there is nothing to prove: exit 2, and no file is made."""
    before = sorted(one_meter.path.rglob("*"))
    assert "no ledger" in invoke("verify", "--site", one_meter.site, exit_code=2).stderr
    assert sorted(one_meter.path.rglob("*")) == before


def test_process_without_logs(one_meter, invoke):
    """A site without logs is no failure: its site file is recorded, and every view is empty."""
    assert "0 files, 0 new readings" in one_meter.process().stdout
    assert "nothing new" in one_meter.process().stdout
    for what in ("totals", "balances", "budget", "alerts", "files"):
        assert one_meter.json(what) == []
        assert "nothing to show" in one_meter.text(what)
    assert [row["kind"] for row in one_meter.json("passes")] == ["pass", "heartbeat"]


def test_a_busy_ledger_is_exit_2(own_works):
    """While another process writes, `process` says so at once and changes nothing."""
    lock = WriterLock(lock_file(own_works.path / "archive"))
    lock.acquire()
    try:
        done = in_a_process("process", "--site", own_works.site)
        assert done.returncode == 2
        assert "another process writes to this ledger" in done.stderr
        assert "Traceback" not in done.stderr
        shown = in_a_process("show", "passes", "--site", own_works.site)
        assert shown.returncode == 0, shown.stderr
    finally:
        lock.release()


def test_process_as_json(own_works, invoke):
    """`process --format json` says what the passes did; a second run finds nothing new."""
    arguments = ("process", "--site", own_works.site, "--now", "2026-10-05T09:00:00+02:00")
    done = json.loads(invoke(*arguments, "--format", "json").stdout)
    assert done["passes"] in {0, 1}
    again = json.loads(invoke(*arguments, "--format", "json").stdout)
    assert again == {
        "passes": 0,
        "files": 0,
        "readings": 0,
        "files_judged_again": 0,
        "meter_days": 0,
        "rejected": [],
        "waiting": [],
        "crashes": [],
        "alerts": [],
        "recorded": [],
    }


def test_verify_proves_the_works(works, invoke):
    """`verify` replays every figure and exits with 0; as text and as JSON."""
    proof = json.loads(invoke("verify", "--site", works.site, "--format", "json").stdout)
    assert proof["proved"] is True
    assert proof["findings"] == []
    assert proof["figures"] >= 33
    assert proof["files"] == len(works.json("files"))
    assert invoke("verify", "--site", works.site).stdout.startswith("proved: ")


def test_verify_of_a_damaged_archive_is_exit_1(own_works, invoke):
    """One changed byte of the archive is found, named and makes exit 1."""
    pack = next(p for p in sorted((own_works.path / "archive").rglob("*")) if p.suffix == ".pack")
    content = bytearray(pack.read_bytes())
    content[len(content) // 2] ^= 1
    pack.chmod(0o644)
    pack.write_bytes(content)
    result = invoke("verify", "--site", own_works.site, "--format", "json", exit_code=1)
    proof = json.loads(result.stdout)
    assert proof["proved"] is False
    assert proof["findings"][0]["message"]
    text = invoke("verify", "--site", own_works.site, exit_code=1)
    assert text.stdout.startswith("differences found: ")
    assert proof["findings"][0]["message"] in text.stderr


def test_a_demo_folder_that_holds_other_things_is_exit_2(tmp_path, invoke):
    """`demo` never writes into a folder that holds something else."""
    (tmp_path / "mine.txt").write_text("keep", encoding="utf-8")
    assert "is not empty" in invoke("demo", tmp_path, exit_code=2).stderr
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]
