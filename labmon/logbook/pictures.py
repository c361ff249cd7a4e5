"""Pictures of log entries: what comes in is opened, drawn anew without its metadata, and stored under a random name."""

import io
import secrets
import warnings
from typing import Any, Final, Protocol

from django.core.files.base import ContentFile
from django.core.files.storage import default_storage
from PIL import Image, ImageOps, UnidentifiedImageError

from labmon.errors import WriteError

LARGEST_BYTES: Final = 12 * 2**20
#: A picture of more pixels is not opened: unpacked it would fill the memory.
MOST_PIXELS: Final = 50_000_000
LONGEST_SIDE: Final = 2560
FORMATS: Final = ("JPEG", "PNG", "WEBP")
CONTENT_TYPES: Final = {".jpg": "image/jpeg", ".png": "image/png"}
_DO: Final = "Send a JPEG, PNG or WebP picture."


class Upload(Protocol):
    """A file as a form gives it."""

    size: int

    def read(self) -> bytes: ...


def store_picture(upload: Upload) -> str:
    """Check, redraw and store; gives the name in Django's storage.

    Redrawing drops what cameras write beside the picture (place, time, serial number) and whatever else the file carried.

    Raises:
        WriteError: Too large, or not a picture of a known kind.
    """
    drawn, suffix = redrawn(upload)
    return default_storage.save(f"log/{secrets.token_hex(16)}{suffix}", ContentFile(drawn))


def redrawn(upload: Upload) -> tuple[bytes, str]:
    """The picture, upright, at most ``LONGEST_SIDE`` wide and high: JPEG, or PNG where it came as one or is see-through."""
    if upload.size > LARGEST_BYTES:
        raise WriteError("picture", f"The picture has {upload.size / 2**20:.0f} MiB.", f"Send at most {LARGEST_BYTES // 2**20}.")
    opened = _opened(upload.read())
    upright = ImageOps.exif_transpose(opened)
    upright.thumbnail((LONGEST_SIDE, LONGEST_SIDE))
    is_flat = upright.mode in {"L", "RGB", "YCbCr", "CMYK"} and opened.format != "PNG"
    bare = upright.convert("RGB" if is_flat else "RGBA")
    out = io.BytesIO()
    if is_flat:
        bare.save(out, "JPEG", quality=88)
    else:
        bare.save(out, "PNG")
    return out.getvalue(), ".jpg" if is_flat else ".png"


def _opened(body: bytes) -> Any:
    """The decoded picture; only the three kinds, and no more pixels than fit."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error", Image.DecompressionBombWarning)
            opened = Image.open(io.BytesIO(body), formats=FORMATS)
            if opened.width * opened.height > MOST_PIXELS:
                raise WriteError("picture", f"The picture has {opened.width} × {opened.height} pixels.", "Send a smaller one.")
            opened.load()
    except (Image.DecompressionBombError, Image.DecompressionBombWarning) as fault:
        raise WriteError("picture", "The picture has too many pixels.", "Send a smaller one.") from fault
    except WriteError:
        raise
    except (UnidentifiedImageError, OSError, ValueError, SyntaxError) as fault:
        raise WriteError("picture", "The file cannot be read as a picture.", _DO) from fault
    return opened
