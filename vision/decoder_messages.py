"""What the decoding libraries say about a file while they decode it.

libjpeg and libtiff return a picture with a made-up rest when data are missing or altered, and only tell
so in a line on the standard error channel. This catches those lines, so that such a picture can be
refused and nothing strange is printed. Knows nothing of pictures.
"""

from __future__ import annotations

import os
import re
import sys
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager

_STANDARD_ERROR = 2

# How libjpeg and libtiff begin their lines (their own source texts).
_FROM_DECODERS = re.compile(
    rb"Corrupt JPEG|Premature end of JPEG|Invalid SOS|Inconsistent progression|Unsupported marker|Warning: unknown JFIF"
    rb"|\w*TIFF\w*: |_tiff\w+: |\w*Fax\w*: |\w*LZW\w*: |\w*Zip\w*: |\w*JPEG\w*: |\w*PackBits\w*: |\w*Decode\w*: "
    rb"|\w*Setup\w*: |\w*StripByteCounts\w*: |MissingRequired: |tempfile\.tif: |Unknown Adobe|  Value "
    rb"|libpng |\[ *(WARN|ERROR):"
)
# Bytes between two segments, and remarks about tags, leave the picture whole.
_HARMLESS = re.compile(
    rb"extraneous bytes before marker|unknown JFIF|Unknown Adobe|^  Value |libpng warning|[Ww]arning|\[ *WARN|[Tt]ag "
)


@contextmanager
def decoder_messages() -> Iterator[list[str]]:
    """Collect what decoders complain of inside the block; lines of others are passed on.

    Yields a list that is filled when the block ends: lines that mean missing or altered data.
    """
    complaints: list[str] = []
    try:
        if sys.stderr is not None:
            sys.stderr.flush()
        usual = os.dup(_STANDARD_ERROR)
    except (OSError, ValueError):
        # No such channel (a service, a windowed program): nothing can be caught.
        yield complaints
        return
    with tempfile.TemporaryFile() as caught:
        try:
            os.dup2(caught.fileno(), _STANDARD_ERROR)
            yield complaints
        finally:
            os.dup2(usual, _STANDARD_ERROR)
            os.close(usual)
            caught.seek(0)
            for line in caught.read(65536).splitlines():
                if not _FROM_DECODERS.match(line):
                    os.write(_STANDARD_ERROR, line + b"\n")
                elif not _HARMLESS.search(line):
                    complaints.append(line.decode("latin-1"))
