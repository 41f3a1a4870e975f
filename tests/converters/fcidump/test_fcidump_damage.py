"""What is wrong with a file is said with its line; a damaged file is never half believed."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from qwfx.converters.fcidump import converter
from qwfx.errors import ConversionError, QwfxError, UnsupportedError
from qwfx.model import Hamiltonian

HEAD = "&FCI NORB=2,NELEC=2,MS2=0,\nORBSYM=1,1,\nISYM=1,\n&END\n"
BODY = "0.7 1 1 1 1\n0.1 2 1 2 1\n0.6 2 2 1 1\n0.65 2 2 2 2\n-1.2 1 1 0 0\n-0.5 2 2 0 0\n0.4 0 0 0 0\n"
UHF = "&FCI NORB=2,NELEC=2,MS2=0,UHF=.TRUE.\n&END\n"
BLOCKS = (
    "0.7 1 1 1 1\n0.0 0 0 0 0\n0.6 1 1 1 1\n0.0 0 0 0 0\n0.65 1 1 2 2\n0.0 0 0 0 0\n-1.2 1 1 0 0\n0.1 2 1 0 0\n"
    "0.0 0 0 0 0\n-1.1 2 2 0 0\n0.0 0 0 0 0\n0.4 0 0 0 0\n"
)
CORPUS = Path(__file__).parent / "corpus"


def read(tmp_path: Path, text: str | bytes, **options: str) -> Hamiltonian:
    path = tmp_path / "x.fcidump"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    h = converter.read(path, {k.replace("_", "-"): v for k, v in options.items()}).wavefunction.hamiltonian
    assert h is not None
    return h


def test_the_undamaged_file(tmp_path: Path) -> None:
    h = read(tmp_path, HEAD + BODY)
    assert np.asarray(h.two_body["both"].values).tolist() == [0.7, 0, 0.1, 0.6, 0, 0.65]
    assert np.asarray(h.one_body["both"]).tolist() == [[-1.2, 0], [0, -0.5]]
    assert h.core_energy == 0.4


@pytest.mark.parametrize(
    ("text", "line", "words"),
    [
        (HEAD.replace("&END\n", "") + BODY, 1, "not closed"),
        ("NORB=2\n" + BODY, 1, "does not begin"),
        (HEAD.replace("NORB=2,", "") + BODY, 1, "no NORB"),
        (HEAD.replace("NELEC=2,", "") + BODY, 1, "no NELEC"),
        (HEAD.replace("NORB=2", "NORB=two") + BODY, 1, "'two'"),
        (HEAD.replace("NORB=2", "NORB=0") + BODY, 1, "NORB is 0"),
        (HEAD.replace("NELEC=2", "NELEC=5").replace("MS2=0", "MS2=1") + BODY, 1, "do not fit"),
        (HEAD.replace("MS2=0", "MS2=1") + BODY, 1, "do not go together"),
        (HEAD.replace("MS2=0", "MS2=4") + BODY, 1, "do not go together"),
        (HEAD.replace("ORBSYM=1,1", "ORBSYM=1,1,1") + BODY, 2, "3 values"),
        (HEAD.replace("ISYM=1", "ISYM=1,2") + BODY, 3, "2 values"),
        (HEAD.replace("ISYM=1", "NORB=2") + BODY, 3, "twice"),
        (HEAD.replace("ISYM=1", "UHF=MAYBE") + BODY, 3, "'MAYBE'"),
        (HEAD, 4, "no records"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2 3"), 6, "an index is 3"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2 -1"), 6, "not a whole number"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2"), 6, "ends before"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1"), 6, "ends before"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2 1 7"), 6, "more behind"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2.5 1"), 6, "not a whole number"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 0 2 1"), 6, "mean nothing"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 0 0 2 1"), 6, "mean nothing"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "NaN 2 1 2 1"), 6, "not a finite"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "-Inf 2 1 2 1"), 6, "not a finite"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "1e999 2 1 2 1"), 6, "not a finite"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "****** 2 1 2 1"), 6, "not a finite"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "(0.1 2 1 2 1"), 6, "not a finite"),
        (HEAD + BODY.replace("0.1 2 1 2 1", "0.1 2 1 2 1\n0.2 1 2 1 2"), 7, "line 6 says"),
        (HEAD + BODY.replace("-0.5 2 2 0 0", "-0.5 2 2 0 0\n0.3 1 2 0 0\n0.3001 2 1 0 0"), 12, "line 11 says"),
        (HEAD + BODY + "0.5 0 0 0 0\n", 12, "line 11 says"),
        (HEAD + BODY.replace("0.7 1", "(0.7,0.2) 1"), 5, "imaginary"),
        (HEAD + BODY[: BODY.index("-1.2")], 8, "no one-electron"),
        (HEAD + BODY[: BODY.index("0.4") - 3], 10, "before four"),
        (HEAD + BODY[: BODY.index("0.4") - 1], 10, "not ended"),
        (UHF + "0.7 1 2 1 1\n-1 1 1 0 0\n0.4 0 0 0 0\n", 3, "joins"),
        (UHF.replace("NORB=2", "NORB=3") + "0.7 1 1 1 1\n-1 1 1 0 0\n0.4 0 0 0 0\n", 1, "NORB is 3"),
        (UHF + "0.7 1 1 5 5\n-1 1 1 0 0\n0.4 0 0 0 0\n", 3, "an index is 5"),
        (UHF + BLOCKS[: BLOCKS.index("-1.1")], 11, "4 records have only zero"),
        (UHF + BLOCKS.replace("0.0 0 0 0 0\n", "", 1), 8, "stands in block 3"),
        (UHF + BLOCKS.replace("0.65 1 1 2 2\n0.0", "0.65 1 1 2 2\n0.01"), 8, "has the value"),
        (UHF + BLOCKS.replace("-1.2 1 1 0 0", "-1.2 1 1 1 1"), 9, "stands in block 4"),
    ],
)
def test_what_and_where(tmp_path: Path, text: str, line: int, words: str) -> None:
    with pytest.raises(ConversionError, match=words) as caught:
        read(tmp_path, text)
    assert caught.value.where == f"{tmp_path / 'x.fcidump'}:{line}"
    assert caught.value.expected
    assert caught.value.remedy


def test_limits(tmp_path: Path) -> None:
    with pytest.raises(UnsupportedError, match="spinors"):
        read(tmp_path, HEAD.replace("ISYM=1", "TREL=.TRUE.") + BODY)
    for n in (5000, 900_000):
        with pytest.raises(UnsupportedError, match="NORB"):
            read(tmp_path, HEAD.replace("NORB=2", f"NORB={n}").replace("ORBSYM=1,1,\n", "") + BODY)


def test_incomplete_on_purpose(tmp_path: Path) -> None:
    h = read(tmp_path, HEAD + BODY[: BODY.index("-1.2")], accept_incomplete="yes")
    assert not np.asarray(h.one_body["both"]).any()


@pytest.mark.parametrize("layout", ["blocks", "interleaved"])
def test_every_truncation_of_a_spin_resolved_file(tmp_path: Path, layout: str) -> None:
    """Cut anywhere before the core energy, the blocks are refused; what is cut between lines may be whole otherwise."""
    whole = (UHF + BLOCKS).encode()
    if layout == "interleaved":
        whole = (UHF + "0.7 1 1 1 1\n0.6 2 2 2 2\n-1.2 1 1 0 0\n-1.1 2 2 0 0\n0.4 0 0 0 0\n").encode()
    for end in range(len(whole)):
        try:
            h = read(tmp_path, whole[:end])
        except QwfxError:
            continue
        assert end == len(whole) - 1 or (h.core_energy == 0 and whole[end - 1 : end + 1].strip() in (b"0", b"-", b""))
        if layout == "blocks":
            assert end >= len(whole) - len("0.4 0 0 0 0\n")


@given(data=st.data())
@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_mutated_bytes(tmp_path: Path, data: st.DataObject) -> None:
    """Any damage gives an error of ours or a file that is whole and finite."""
    name = data.draw(st.sampled_from(["f_fd_n2_cas66_ccpvdz", "z_z18_complex_zero_imag", "z_z10_crlf_blank_lines"]))
    content = bytearray((CORPUS / name / "case.fcidump").read_bytes())
    for _ in range(data.draw(st.integers(1, 3))):
        at = data.draw(st.integers(0, 1_000_000) | st.integers(0, 120)) % len(content)
        kind = data.draw(st.sampled_from(["change", "remove", "insert", "cut"]))
        if kind == "change":
            content[at] = data.draw(st.sampled_from(b"0123456789.-+eE(),/&$ \n\r\t=*A\x00\xff") | st.integers(0, 255))
        elif kind == "remove":
            del content[at : at + data.draw(st.integers(1, 40))]
        elif kind == "insert":
            content[at:at] = data.draw(st.binary(max_size=6))
        else:
            del content[at + 1 :]
        content = content or bytearray(b" ")
    error, h = None, None
    try:
        h = read(tmp_path, bytes(content))
    except QwfxError as caught:
        error = caught
    if h is None:
        assert error is not None
        assert error.where
        assert error.expected
        assert error.remedy
        return
    for array in (*h.one_body.values(), *(table.values for table in h.two_body.values())):
        assert np.isfinite(np.asarray(array)).all()
