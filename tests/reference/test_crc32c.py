"""The CRC of the journal against published check vectors, for every kind of buffer that a record can come in."""

from __future__ import annotations

import mmap

import google_crc32c
import numpy as np
import pytest
from strandline.journal.frame import extend_crc

# RFC 3720, appendix B.4 ("CRC Examples"). The RFC prints the four CRC bytes in the order in which they are sent,
# least significant first: aa 36 91 8a is 0x8a9136aa.
RFC_3720_B4 = [
    ("32 bytes of zeros", bytes(32), "aa36918a"),
    ("32 bytes of ones", b"\xff" * 32, "43aba862"),
    ("32 bytes of incrementing 00..1f", bytes(range(32)), "4e79dd46"),
    ("32 bytes of decrementing 1f..00", bytes(range(31, -1, -1)), "5cdb3f11"),
    (
        "an iSCSI - SCSI Read (10) Command PDU",
        bytes.fromhex(
            "01c00000 00000000 00000000 00000000 14000000 00000400 00000014 00000018 "
            "28000000 00000000 02000000 00000000"
        ),
        "563a96d9",
    ),
]


@pytest.mark.parametrize(("data", "sent"), [row[1:] for row in RFC_3720_B4], ids=[row[0] for row in RFC_3720_B4])
def test_rfc_3720_vectors(data: bytes, sent: str) -> None:
    expected = int.from_bytes(bytes.fromhex(sent), "little")
    words = np.frombuffer(data, "<u4").data
    for buffer in (data, bytearray(data), memoryview(data), memoryview(bytearray(data)), words):
        assert extend_crc(0, buffer) == expected
    for cut in range(1, len(data)):
        assert extend_crc(extend_crc(0, data[:cut]), memoryview(data)[cut:]) == expected


def test_check_value_of_the_parameter_sets() -> None:
    # The check value of CRC-32C (Castagnoli), the CRC of the nine digits, as CRC catalogues list it. From memory.
    assert extend_crc(0, b"123456789") == 0xE3069283


def test_the_hardware_implementation_is_used() -> None:
    # The pure Python fallback is some 1,000 times slower; it would pass every other test.
    assert google_crc32c.implementation == "c"


def test_a_mapped_file_is_read_without_a_copy(tmp_path) -> None:
    path = tmp_path / "zeros"
    path.write_bytes(bytes(32))
    with path.open("rb") as file, mmap.mmap(file.fileno(), 0, prot=mmap.PROT_READ) as mapped:
        view = memoryview(mapped)
        assert extend_crc(0, view) == 0x8A9136AA
        view.release()
