"""Named CRC parameter sets of open standards, in the Williams model.

The numbers follow the documents named; clause numbers are from memory.
"""

from typing import NamedTuple


class CrcCode(NamedTuple):
    """Parameters of a CRC: ``init`` and ``poly`` for the unreflected register, top term dropped."""

    width: int
    poly: int
    init: int = 0
    refin: bool = False
    refout: bool = False
    xorout: int = 0
    source: str = ""


STANDARDS: dict[str, CrcCode] = {
    "iso-13239-16": CrcCode(16, 0x1021, 0xFFFF, True, True, 0xFFFF, "ISO/IEC 13239; RFC 1662 C.2"),
    "iso-13239-32": CrcCode(32, 0x04C11DB7, 2**32 - 1, True, True, 2**32 - 1, "ISO/IEC 13239; RFC 1662 C.3"),
    "ieee-802-3": CrcCode(32, 0x04C11DB7, 2**32 - 1, True, True, 2**32 - 1, "IEEE 802.3, 3.2.9"),
    "rfc-3720": CrcCode(32, 0x1EDC6F41, 2**32 - 1, True, True, 2**32 - 1, "RFC 3720, 12.1"),
    "itu-t-v41": CrcCode(16, 0x1021, 0, True, True, 0, "ITU-T V.41, octets low bit first"),
    "ieee-802-15-4": CrcCode(16, 0x1021, 0, True, True, 0, "IEEE 802.15.4, FCS of 2 octets"),
    "3gpp-crc16": CrcCode(16, 0x1021, 0, source="3GPP TS 36.212, 5.1.1, gCRC16"),
    "ccsds": CrcCode(16, 0x1021, 0xFFFF, source="CCSDS 132.0-B, 4.1.6; ECSS-E-70-41A, annex A"),
    "iso-18000-63": CrcCode(16, 0x1021, 0xFFFF, xorout=0xFFFF, source="ISO/IEC 18000-63; EN 300 392-2"),
    "itu-t-g704-crc4": CrcCode(4, 0x3, 0, True, True, 0, "ITU-T G.704, 2.3.3"),
    "itu-t-g704-crc6": CrcCode(6, 0x03, 0, True, True, 0, "ITU-T G.704, 2.1.3.1.2"),
    "itu-t-i432": CrcCode(8, 0x07, 0, xorout=0x55, source="ITU-T I.432.1, 4.3.2"),
    "modbus": CrcCode(16, 0x8005, 0xFFFF, True, True, 0, "MODBUS over Serial Line V1.02, 6.2.2"),
    "ieee-1815": CrcCode(16, 0x3D65, 0, True, True, 0xFFFF, "IEEE 1815, clause 9"),
    "en-13757-4": CrcCode(16, 0x3D65, 0, xorout=0xFFFF, source="EN 13757-4, data link layer"),
    "iso-11898-crc15": CrcCode(15, 0x4599, source="ISO 11898-1, 10.4.2.6"),
    "iso-11898-crc17": CrcCode(17, 0x1685B, 0x10000, source="ISO 11898-1:2015, top bit set at the start"),
    "iso-11898-crc21": CrcCode(21, 0x102899, 0x100000, source="ISO 11898-1:2015, top bit set at the start"),
    "iso-11898-crc17-zero": CrcCode(17, 0x1685B, source="ISO 11898-1, start value 0 of most tables"),
    "iso-11898-crc21-zero": CrcCode(21, 0x102899, source="ISO 11898-1, start value 0 of most tables"),
    "iso-17458-header": CrcCode(11, 0x385, 0x01A, source="ISO 17458-2, header"),
    "iso-17458-a": CrcCode(24, 0x5D6DCB, 0xFEDCBA, source="ISO 17458-2, channel A"),
    "iso-17458-b": CrcCode(24, 0x5D6DCB, 0xABCDEF, source="ISO 17458-2, channel B"),
    "rfc-9580": CrcCode(24, 0x864CFB, 0xB704CE, source="RFC 9580, 6.1"),
    "3gpp-crc8": CrcCode(8, 0x9B, source="3GPP TS 36.212, 5.1.1, gCRC8"),
    "3gpp-crc24a": CrcCode(24, 0x864CFB, source="3GPP TS 36.212, 5.1.1, gCRC24A"),
    "3gpp-crc24b": CrcCode(24, 0x800063, source="3GPP TS 36.212, 5.1.1, gCRC24B"),
    "3gpp-crc6": CrcCode(6, 0x21, source="3GPP TS 38.212, 5.1, gCRC6"),
    "icao-mode-s": CrcCode(24, 0xFFF409, source="ICAO Annex 10 vol. IV, 3.1.2.3.3"),
    "bluetooth-hec": CrcCode(8, 0xA7, 0, True, True, 0, "Bluetooth Core vol. 2 part B, 7.1.1, UAP 0"),
    "bluetooth-le": CrcCode(24, 0x00065B, 0x555555, True, True, 0,
                            "Bluetooth Core vol. 6 part B, 3.1.1, advertising channels"),
    "iso-14443-a": CrcCode(16, 0x1021, 0xC6C6, True, True, 0, "ISO/IEC 14443-3, annex B"),
    "iso-14443-b": CrcCode(16, 0x1021, 0xFFFF, True, True, 0xFFFF, "ISO/IEC 14443-3, annex B"),
    "iso-18000-63-crc5": CrcCode(5, 0x09, 0x09, source="ISO/IEC 18000-63, annex F"),
    "ecma-182": CrcCode(64, 0x42F0E1EBA9EA3693, source="ECMA-182, 6.5"),
    "iso-3309-64": CrcCode(64, 0x1B, 2**64 - 1, True, True, 2**64 - 1, "ISO 3309, 64-bit polynomial"),
    "iso-3309-64-zero": CrcCode(64, 0x1B, 0, True, True, 0, "ISO 3309, 64-bit polynomial, start value 0"),
    "sae-j1850": CrcCode(8, 0x1D, 0xFF, xorout=0xFF, source="SAE J1850"),
    "en-302-307": CrcCode(8, 0xD5, source="ETSI EN 302 307-1, 5.1.4"),
    "ts-102-361": CrcCode(16, 0x1021, 0, xorout=0xFFFF, source="ETSI TS 102 361-1, B.3.8, before masking"),
}
