"""What single bits and code numbers on the wire say, each with its words for people.

One rule: a number given once is never given another meaning within a major version.
"""

__all__ = [
    "COUNTS_FLAGS",
    "FEATURES",
    "FEATURE_CONDITIONS",
    "FEATURE_CRESTS",
    "FEATURE_KEY",
    "FEATURE_RESULT",
    "FLAG_DROPPED",
    "FLAG_FORWARD_CLIPPED",
    "FLAG_KEY",
    "FLAG_REFERENCE",
    "FLAG_REFLECTED_CLIPPED",
    "REMARK_CODES",
]

FLAG_FORWARD_CLIPPED = 0x01
FLAG_REFLECTED_CLIPPED = 0x02
FLAG_KEY = 0x04
FLAG_REFERENCE = 0x08
FLAG_DROPPED = 0x80

FEATURE_CRESTS = 0x01
FEATURE_CONDITIONS = 0x02
FEATURE_KEY = 0x04
FEATURE_RESULT = 0x08

#: Bits of the flags byte of every frame that carries counts.
COUNTS_FLAGS: dict[int, str] = {
    FLAG_FORWARD_CLIPPED: "forward clipped",
    FLAG_REFLECTED_CLIPPED: "reflected clipped",
    FLAG_KEY: "key input active",
    FLAG_REFERENCE: "reference out of range",
    FLAG_DROPPED: "frames were dropped before this one",
}

#: Bits of the features byte of the nameplate.
FEATURES: dict[int, str] = {
    FEATURE_CRESTS: "crests",
    FEATURE_CONDITIONS: "conditions",
    FEATURE_KEY: "key input",
    FEATURE_RESULT: "own result",
}

#: Codes of a remark; 0x80 and above are the builder's own.
REMARK_CODES: dict[int, str] = {
    0x00: "free text",
    0x01: "started, cause not known",
    0x02: "started, power applied",
    0x03: "started by the reset pin",
    0x04: "started after a brown-out",
    0x05: "started by the watchdog",
    0x06: "started by software",
    0x10: "supply low",
    0x11: "supply good again",
    0x12: "reference out of range",
    0x13: "reference good again",
    0x20: "transmit buffer overrun",
    0x21: "conversions missed",
    0x22: "converter fault",
    0x23: "temperature sensor lost",
    0x30: "period changed",
}
