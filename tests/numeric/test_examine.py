"""`manage.py examine`: the frozen keys, the exit codes, and a bad file that stops nothing. No database is touched."""

import hashlib
import io
import json
import os
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path

import numpy as np
import pytest
import rfc8785
from django.core.management import call_command

from spectra.core.types import Conditions
from spectra.examine import CannotStart, Examiner, Request, printable
from tests.numeric.synthetic import ALKANE, ESTER, axis, spectrum

ROOT = Path(__file__).resolve().parents[2]
KEYS = [
    "schema",
    "file",
    "sha256",
    "block",
    "title",
    "status",
    "problem",
    "findings",
    "axis",
    "ordinate",
    "noise_absorbance",
    "bands",
    "groups",
    "identity",
    "impurities",
    "versions",
    "digest",
]


def written(folder, name, bands, *, seed=1, title="sample"):
    x, y = spectrum(bands, seed=seed, x=axis(step_cm1=2.0))
    lines = [
        f"##TITLE={title}",
        "##JCAMP-DX=4.24",
        "##DATA TYPE=INFRARED SPECTRUM",
        "##ORIGIN=test",
        "##OWNER=test",
        "##XUNITS=1/CM",
        "##YUNITS=ABSORBANCE",
        "##RESOLUTION=4",
        f"##FIRSTX={x[0]:g}",
        f"##LASTX={x[-1]:g}",
        f"##NPOINTS={len(x)}",
        "##XFACTOR=1",
        "##YFACTOR=0.000001",
        f"##FIRSTY={round(y[0] * 1e6) * 1e-6:.6f}",
        "##XYDATA=(X++(Y..Y))",
    ]
    whole = np.round(y * 1e6).astype(int)
    for start in range(0, len(x), 8):
        lines.append(f"{x[start]:g} " + " ".join(str(v) for v in whole[start : start + 8]))
    path = folder / name
    path.write_text("\n".join([*lines, "##END=", ""]), encoding="ascii")
    return path


@pytest.fixture
def files(tmp_path):
    broken = tmp_path / "broken.jdx"
    broken.write_bytes(b"\x89PNG\r\n\x1a\nnothing")
    return {
        "sample": written(tmp_path, "sample.jdx", ESTER, seed=2),
        "reference": written(tmp_path, "reference.jdx", ESTER),
        "watch": written(tmp_path, "watch.jdx", ALKANE, title="hydrocarbon"),
        "broken": broken,
    }


def run(*arguments):
    out, err = io.StringIO(), io.StringIO()
    code = 0
    try:
        with redirect_stderr(err):
            call_command("examine", *[str(a) for a in arguments], stdout=out, stderr=err)
    except SystemExit as stop:
        code = stop.code
    return code, out.getvalue(), err.getvalue()


def test_one_object_a_line_with_exactly_the_documented_keys(files):
    code, out, _ = run(
        files["sample"],
        files["sample"],
        "--declared",
        files["reference"],
        "--watch",
        files["watch"],
        "--phase",
        "liquid",
        "--technique",
        "transmission",
        "--json",
    )
    assert code == 0
    documents = [json.loads(line) for line in out.splitlines()]
    assert len(documents) == 2
    for document in documents:
        assert list(document) == KEYS
        assert document["schema"] == 1 and document["status"] == "ok" and document["problem"] is None
        assert list(document["bands"][0]) == [
            "position_cm1",
            "height_absorbance",
            "prominence_absorbance",
            "fwhm_cm1",
            "area_absorbance_cm1",
            "intensity",
            "shape",
            "snr",
            "kind",
        ]
        assert list(document["groups"][0]) == [
            "group",
            "verdict",
            "probability",
            "agrees",
            "for",
            "against",
            "would_decide",
        ]
        assert list(document["identity"]) == [
            "verdict",
            "agrees",
            "metrics",
            "missing_bands",
            "extra_bands",
            "size_outliers",
        ]
        assert list(document["impurities"]) == ["screened", "unexplained"]
        assert list(document["impurities"]["screened"][0]) == [
            "name",
            "estimate_fraction",
            "standard_uncertainty",
            "significance",
            "detection_limit_fraction",
            "scale",
            "verdict",
        ]
        assert document["identity"]["verdict"] == "consistent"
        assert list(document["axis"]) == ["first_cm1", "last_cm1", "points", "spacing_cm1", "declared_unit"]


def test_the_digest_can_be_computed_again_and_leaves_the_path_out(files, tmp_path):
    document = json.loads(run(files["sample"], "--json", "--phase", "liquid")[1])
    rest = {k: v for k, v in document.items() if k not in ("file", "digest")}
    assert hashlib.sha256(rfc8785.dumps(rest)).hexdigest() == document["digest"]
    elsewhere = tmp_path / "other name.jdx"
    elsewhere.write_bytes(files["sample"].read_bytes())
    assert json.loads(run(elsewhere, "--json", "--phase", "liquid")[1])["digest"] == document["digest"]


def test_sections_that_were_not_asked_for_are_absent(files):
    document = json.loads(run(files["sample"], "--json")[1])
    assert "identity" not in document and "impurities" not in document


def test_a_bad_file_is_refused_and_stops_nothing(files, tmp_path):
    code, out, _ = run(files["broken"], tmp_path / "missing.jdx", tmp_path, files["sample"], "--json")
    assert code == 1
    documents = [json.loads(line) for line in out.splitlines()]
    assert [d["status"] for d in documents] == ["refused", "refused", "refused", "ok"]
    for document in documents[:3]:
        assert document["problem"]["code"] and document["problem"]["message"] and "bands" not in document
    assert documents[1]["sha256"] is None and documents[0]["sha256"]


def test_text_for_people_says_that_it_is_no_record_and_has_no_colour_in_a_pipe(files):
    code, out, _ = run(files["sample"], "--declared", files["reference"], "--phase", "liquid")
    assert code == 0 and "not a record" in out and "\x1b" not in out
    assert "ester" in out and "identity against" in out


def test_a_title_cannot_steer_the_terminal(tmp_path):
    path = written(tmp_path, "evil.jdx", ESTER, title="a\x1b[2Jb")
    assert "\x1b" not in run(path)[1]
    assert printable("a\x1b[31m\x07b") == "a [31m b"


@pytest.mark.parametrize(
    "arguments",
    [
        ["--phase", "plasma"],
        ["--columns", "0"],
        ["--watch", "w"],
        ["--declared", "nowhere"],
        ["--smiles", "C(C"],
        ["--x-unit", "inch"],
    ],
)
def test_wrong_use_ends_with_two(files, arguments):
    environment = {**os.environ, "BANDLEDGER_NO_VENV": "1", "DJANGO_SETTINGS_MODULE": "labsite.settings"}
    done = subprocess.run(
        [sys.executable, "manage.py", "examine", str(files["sample"]), *arguments],
        cwd=ROOT,
        env=environment,
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == 2 and done.stderr.strip() and not done.stdout.strip()


def test_it_can_be_switched_off(files, settings):
    settings.EXAMINE = False
    code, out, err = run(files["sample"])
    assert code == 2 and not out and "switched off" in err


def test_many_files_draw_a_bar_only_on_a_terminal(files):
    assert "files" not in run(*[files["sample"]] * 5)[2]


def test_an_unreadable_reference_is_said_before_anything_is_read(files):
    with pytest.raises(CannotStart, match="--declared"):
        Examiner(Request(declared=files["broken"], conditions=Conditions()))


def test_output_streams_line_by_line(files):
    class Sink(io.StringIO):
        flushed = 0

        def flush(self):
            Sink.flushed += 1

    with redirect_stdout(Sink()) as sink:
        call_command("examine", str(files["sample"]), str(files["sample"]), "--json", stdout=sink)
    assert Sink.flushed >= 2


def changed(path, old, new):
    """A copy of a file with one header line replaced."""
    text = path.read_text(encoding="ascii")
    assert old in text
    copy = path.with_name(f"changed_{path.name}")
    copy.write_text(text.replace(old, new), encoding="ascii")
    return copy


def test_an_answer_settles_only_what_the_sample_leaves_open(files):
    silent = changed(files["sample"], "##YUNITS=ABSORBANCE\n", "##YUNITS=\n")
    document = json.loads(run(silent, "--ordinate", "absorbance", "--json", "--phase", "liquid")[1])
    assert document["status"] == "ok" and document["ordinate"]["used"] == "absorbance"
    stating = json.loads(run(files["sample"], "--ordinate", "transmittance", "--json", "--phase", "liquid")[1])
    assert stating["ordinate"]["used"] == "absorbance"
    (said,) = [f for f in stating["findings"] if f["code"] == "examine.answer_not_needed"]
    assert "ABSORBANCE" in said["message"] and "transmittance was not applied" in said["message"]


def test_an_answer_for_the_sample_does_not_touch_a_reference_that_states_its_own(files):
    silent = changed(files["sample"], "##XUNITS=1/CM\n", "##XUNITS=\n")
    arguments = ["--declared", files["reference"], "--watch", files["watch"], "--phase", "liquid", "--json"]
    document = json.loads(run(silent, *arguments, "--x-unit", "cm-1")[1])
    assert document["identity"]["verdict"] == "consistent"
    micrometres = json.loads(run(files["sample"], *arguments, "--x-unit", "um")[1])
    assert micrometres["identity"]["verdict"] == "consistent"
    said = [f["message"] for f in micrometres["findings"] if f["code"] == "examine.answer_not_needed"]
    assert len(said) == 3 and any(m.startswith("--declared reference.jdx:") for m in said)


def test_what_was_remarked_while_a_reference_was_read_is_shown(files):
    doubtful = changed(files["reference"], "##NPOINTS=", "##DELTAX=7\n##NPOINTS=")
    code, out, _ = run(files["sample"], "--declared", doubtful, "--phase", "liquid")
    assert code == 0 and "--declared changed_reference.jdx: DELTAX is declared as 7" in out


def test_a_refusal_says_with_which_option_it_can_be_answered(files):
    silent = changed(files["sample"], "##XUNITS=1/CM\n", "##XUNITS=\n")
    code, out, _ = run(silent)
    assert code == 1 and "REFUSED" in out and "Use --x-unit cm-1, um or nm." in out
    with pytest.raises(CannotStart, match="Use --x-unit"):
        Examiner(Request(declared=silent))
    assert "Name a spectrum file." in run(files["sample"].parent)[1]


def test_two_open_questions_are_answered_one_after_the_other(files):
    silent = changed(files["sample"], "##XUNITS=1/CM\n##YUNITS=ABSORBANCE\n", "##XUNITS=\n##YUNITS=\n")
    document = json.loads(run(silent, "--x-unit", "cm-1", "--ordinate", "absorbance", "--json")[1])
    assert document["status"] == "ok" and not [f for f in document["findings"] if f["code"].startswith("examine.")]
