"""Quality codes against OPC DA 3.0 section 6.8 and OPC UA Part 4 (StatusCode)."""

import pytest

from audit.exports.codes import Quality, is_good, opc_da, opc_ua, word
from audit.records import ExportSource

# OPC Data Access 3.0, section 6.8: quality byte QQSSSSLL
OPC_DA = {
    0: Quality.BAD,  # non-specific
    4: Quality.BAD,  # configuration error
    8: Quality.BAD,  # not connected
    12: Quality.BAD,  # device failure
    16: Quality.BAD,  # sensor failure
    20: Quality.BAD,  # last known value
    24: Quality.BAD,  # communication failure
    28: Quality.BAD,  # out of service
    63: Quality.BAD,  # end of the range of bad
    64: Quality.UNCERTAIN,  # non-specific
    68: Quality.UNCERTAIN,  # last usable value
    80: Quality.UNCERTAIN,  # sensor not accurate
    84: Quality.UNCERTAIN,  # engineering units exceeded
    88: Quality.UNCERTAIN,  # sub-normal
    127: Quality.UNCERTAIN,
    128: Quality.BAD,  # reserved range
    191: Quality.BAD,
    192: Quality.GOOD,  # non-specific
    216: Quality.GOOD,  # local override
    255: Quality.GOOD,
}

# OPC UA: OPCFoundation/UA-Nodeset, Schema/StatusCode.csv
OPC_UA = {
    0x00000000: Quality.GOOD,  # Good
    0x00300000: Quality.GOOD,  # GoodClamped
    0x00960000: Quality.GOOD,  # GoodLocalOverride
    0x00A50000: Quality.GOOD,  # GoodNoData
    0x40000000: Quality.UNCERTAIN,  # Uncertain
    0x408F0000: Quality.UNCERTAIN,  # UncertainNoCommunicationLastUsable
    0x40900000: Quality.UNCERTAIN,  # UncertainLastUsableValue
    0x40910000: Quality.UNCERTAIN,  # UncertainSubstituteValue
    0x40920000: Quality.UNCERTAIN,  # UncertainInitialValue
    0x40930000: Quality.UNCERTAIN,  # UncertainSensorNotAccurate
    0x40940000: Quality.UNCERTAIN,  # UncertainEngineeringUnitsExceeded
    0x40950000: Quality.UNCERTAIN,  # UncertainSubNormal
    0x80000000: Quality.BAD,  # Bad
    0x80310000: Quality.BAD,  # BadNoCommunication
    0x808A0000: Quality.BAD,  # BadNotConnected
    0x808B0000: Quality.BAD,  # BadDeviceFailure
    0x808C0000: Quality.BAD,  # BadSensorFailure
    0x808D0000: Quality.BAD,  # BadOutOfService
    0x809B0000: Quality.BAD,  # BadNoData
    0x809D0000: Quality.BAD,  # BadDataLost
    0xC0000000: Quality.BAD,  # reserved severity
}


@pytest.mark.parametrize(("code", "quality"), OPC_DA.items())
def test_opc_da_quality_byte(code: int, quality: Quality) -> None:
    assert opc_da(code) is quality
    assert opc_da(code | 0xA500) is quality  # section 6.8: the high byte is the vendor's


@pytest.mark.parametrize(("code", "quality"), OPC_UA.items())
def test_opc_ua_status_code(code: int, quality: Quality) -> None:
    assert opc_ua(code) is quality
    assert opc_ua(code | 0x0402) is quality  # Part 11: historian bits, InfoType DataValue
    signed = code - (1 << 32) if code >= 1 << 31 else code
    assert opc_ua(signed) is quality


def test_one_number_means_two_things_so_the_scheme_is_declared() -> None:
    assert opc_da(192) is Quality.GOOD
    assert opc_da(0) is Quality.BAD
    assert opc_ua(0) is Quality.GOOD
    assert opc_ua(0x80000000) is Quality.BAD
    assert opc_da(0x80000000) is None


@pytest.mark.parametrize("code", [-1, 1 << 16])
def test_numbers_that_are_no_da_code(code: int) -> None:
    assert opc_da(code) is None


@pytest.mark.parametrize("code", [-(1 << 31) - 1, 1 << 32])
def test_numbers_that_are_no_ua_code(code: int) -> None:
    assert opc_ua(code) is None


def test_declared_words() -> None:
    assert word("GOOD", ["Good"]) is Quality.GOOD
    assert word("Uncertain, sub-normal", ["Good"]) is Quality.UNCERTAIN
    assert word("Uncertain, sub-normal", ["uncertain, sub-normal"]) is Quality.GOOD
    assert word("Goodish", ["Good"]) is Quality.BAD
    assert word("", ["Good"]) is Quality.BAD


@pytest.mark.parametrize(
    ("scheme", "text", "default", "declared_good"),
    [
        ("words", " good ", True, True),
        ("words", "uncertain", False, True),
        ("words", "Bad", False, False),
        ("opc_da", "192", True, True),
        ("opc_da", "0xC0", True, True),
        ("opc_da", "64", False, True),
        ("opc_da", "Good", None, None),
        ("opc_da", "", None, None),
        ("opc_da", "9" * 5000, None, None),
        ("opc_ua", "0", True, True),
        ("opc_ua", "0x40000000", False, True),
        ("opc_ua", "2147483648", False, False),
        ("opc_ua", "-2147483648", False, False),
        ("opc_ua", "1.5", None, None),
    ],
)
def test_uncertain_is_bad_unless_declared(
    scheme: str, text: str, default: bool | None, declared_good: bool | None
) -> None:
    # OPC UA Part 13, section 4.2.1.2: TreatUncertainAsBad is true by default
    assert is_good(text, ExportSource("x", "*", quality_scheme=scheme)) is default
    declared = ExportSource("x", "*", quality_scheme=scheme, uncertain_is_good=True)
    assert is_good(text, declared) is declared_good
