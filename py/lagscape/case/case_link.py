"""The case in a link: `L1.` and the case file's JSON, compressed (zlib, RFC 1950) and in base64url (RFC 4648, section 5).

It goes after `#`, which browsers do not send. It holds every number, not only what differs from typical, so that a later change of
a typical value does not change a patient's case. zlib's checksum finds damage. The text needs no escaping and stays below
LONGEST_LINK characters with every number at 17 digits and every lever laid.
"""

from __future__ import annotations

import base64
import binascii
import json
import re
import zlib

from lagscape.case.case import Case, LeverCheck
from lagscape.case.case_file import LARGEST_FILE_BYTES, case_from_document, case_to_document, parse_json
from lagscape.errors import CaseFormatError

__all__ = ["LINK_PREFIX", "LONGEST_LINK", "case_from_link", "case_to_link"]

LINK_PREFIX = "L1."
"""Names the packing, not the layout: the packed document has its own version and migrates like a file."""

LONGEST_LINK = 2000
"""Mail programs and older address bars cut longer ones (common practice, no source)."""

_PACKED = re.compile(r"[A-Za-z0-9_-]+\Z")
_DAMAGED = "The link is damaged, perhaps cut short on its way; copy it again whole, or open the case's file."


def case_to_link(case: Case) -> str:
    """The part of a link after `#`, below LONGEST_LINK characters, all of them letters, digits, `.`, `_` and `-`."""
    document = json.dumps(case_to_document(case), separators=(",", ":"), allow_nan=False)
    packed = zlib.compress(document.encode("ascii"), 9)
    return LINK_PREFIX + base64.urlsafe_b64encode(packed).decode("ascii").rstrip("=")


def case_from_link(link: str, check_lever: LeverCheck | None = None) -> Case:
    """The case in a link, equal to the last bit to the one that was packed.

    Parameters
    ----------
    link : str
        The part after `#`, with or without the `#`, or the whole address.
    check_lever : callable, optional
        As in `case_file.case_from_json`.

    Raises
    ------
    CaseFormatError
        If it is damaged, no link of this tool, or holds a case that cannot be read.
    """
    text = link.rpartition("#")[2].strip()
    if not text.startswith(LINK_PREFIX):
        if re.match(r"L\d+\.", text):
            raise CaseFormatError("The link was made by a newer Lagscape; open it there, or ask for the case's file.")
        raise CaseFormatError(f"The link holds no case: the part after # must start with {LINK_PREFIX}")
    return case_from_document(parse_json(_unpacked(text.removeprefix(LINK_PREFIX))), check_lever)


def _unpacked(text: str) -> bytes:
    if len(text) > 4 * LONGEST_LINK or not _PACKED.match(text):
        raise CaseFormatError(_DAMAGED)
    try:
        packed = base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))
        unpacker = zlib.decompressobj()
        document = unpacker.decompress(packed, LARGEST_FILE_BYTES)
    except (binascii.Error, zlib.error):
        raise CaseFormatError(_DAMAGED) from None
    # The last character of base64 may differ without changing a byte, so the text is compared as well.
    same_text = base64.urlsafe_b64encode(packed).decode("ascii").rstrip("=") == text
    if not unpacker.eof or unpacker.unused_data or not same_text:
        raise CaseFormatError(_DAMAGED)
    return document
