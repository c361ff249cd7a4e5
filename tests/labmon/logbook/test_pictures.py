import io

import pytest
from django.core.files.storage import default_storage
from django.core.files.uploadedfile import SimpleUploadedFile
from PIL import Image

from labmon.errors import WriteError
from labmon.logbook.pictures import LARGEST_BYTES, LONGEST_SIDE, redrawn, store_picture


def upload(body: bytes) -> SimpleUploadedFile:
    return SimpleUploadedFile("photo.jpg", body, "image/jpeg")


def picture(kind: str = "JPEG", size=(40, 20), mode: str = "RGB", **options) -> bytes:
    out = io.BytesIO()
    Image.new(mode, size, 200 if mode == "L" else (200, 30, 30, 90)[: len(mode)]).save(out, kind, **options)
    return out.getvalue()


def test_place_and_camera_are_dropped_and_the_picture_is_put_upright():
    exif = Image.Exif()
    exif[0x0112] = 6  # orientation: turn by 90° (Exif 2.32 table of Orientation, from memory)
    exif[0x010F] = "camera maker"
    exif.get_ifd(0x8825)[1] = "N"  # GPS
    drawn, suffix = redrawn(upload(picture(exif=exif)))
    seen = Image.open(io.BytesIO(drawn))
    assert (suffix, seen.format, seen.size) == (".jpg", "JPEG", (20, 40))
    assert not seen.getexif() and b"camera maker" not in drawn


@pytest.mark.parametrize(("kind", "mode", "suffix"), [
    ("PNG", "RGBA", ".png"), ("PNG", "RGB", ".png"), ("WEBP", "RGB", ".jpg"), ("JPEG", "L", ".jpg"), ("JPEG", "CMYK", ".jpg")])
def test_known_kinds(kind, mode, suffix):
    assert redrawn(upload(picture(kind, mode=mode)))[1] == suffix


def test_a_large_one_is_made_smaller_with_its_shape_kept():
    seen = Image.open(io.BytesIO(redrawn(upload(picture(size=(4000, 1000))))[0]))
    assert seen.size == (LONGEST_SIDE, LONGEST_SIDE // 4)


@pytest.mark.parametrize("body", [
    b"", b"<svg xmlns='http://www.w3.org/2000/svg'><script>alert(1)</script></svg>", b"GIF89a" + bytes(40),
    picture("GIF"), picture("BMP"), picture("TIFF"), picture()[:200], b"\xff\xd8\xff\xe0<html><script>"])
def test_what_is_no_known_picture_is_refused(body):
    with pytest.raises(WriteError) as refused:
        redrawn(upload(body))
    assert refused.value.field == "picture" and refused.value.do


def test_bytes_behind_a_picture_do_not_come_along():
    assert b"<script>" not in redrawn(upload(picture() + b"<script>alert(1)</script>"))[0]


def test_too_many_pixels_or_bytes_are_refused_before_they_are_unpacked():
    bomb = picture("PNG", size=(9000, 6000), mode="L")
    assert len(bomb) < 100_000
    with pytest.raises(WriteError, match="9000 × 6000"):
        redrawn(upload(bomb))
    huge = upload(b"x")
    huge.size = LARGEST_BYTES + 1
    with pytest.raises(WriteError, match="MiB"):
        redrawn(huge)


def test_stored_under_a_name_nobody_can_guess(settings, tmp_path):
    settings.MEDIA_ROOT = tmp_path
    one, other = store_picture(upload(picture())), store_picture(upload(picture()))
    assert one != other and "photo" not in one and len(one) > 32 and default_storage.exists(one)
