"""Every transfer syntax that is read: equal numbers from each exact one, cautions on the rest."""

from __future__ import annotations

import logging
import threading
import warnings

import lossless_jpeg
import numpy as np
import pytest
import series_writer as sw
from pydicom import dcmread
from pydicom.data import get_testdata_file
from pydicom.encaps import generate_frames
from pydicom.uid import (
    JPEG2000,
    JPEG2000Lossless,
    JPEGExtended12Bit,
    JPEGLossless,
    JPEGLosslessSV1,
    JPEGLSLossless,
    JPEGLSNearLossless,
    RLELossless,
)

from ct_measure_plugin.dicom import read_series, scan_folder, scan_series, syntaxes
from ct_measure_plugin.dicom.codestream import codestream_of
from ct_measure_plugin.errors import DecoderMissingError, SeriesError

RNG = np.random.default_rng(5)
#: full range of 12 bit, and values of 16 bit with both signs that are possible HU
UNSIGNED = RNG.integers(0, 4096, (33, 47), dtype=np.uint16)
SIGNED = RNG.integers(-1400, 20000, (33, 47), dtype=np.int16)


def codes(volume):
    return {caution.code for caution in volume.cautions}


def image(stored, bits):
    return sw.ct_slice(stored, BitsStored=bits, HighBit=bits - 1, RescaleIntercept="-24")


def write_exact(path, name, stored, bits):
    ds = image(stored, bits)
    if name in sw.NATIVE:
        return sw.save(ds, path, sw.NATIVE[name])
    if name.startswith("jpeg lossless"):
        predictor = int(name[-1])
        uid = JPEGLosslessSV1 if predictor == 1 else JPEGLossless
        plane = stored.view(np.uint16) & np.uint16((1 << bits) - 1)
        frame = lossless_jpeg.encode(plane, precision=bits, predictor=predictor)
        return sw.save_frames(ds, path, uid, [frame])
    uid = {"rle": RLELossless, "jpeg-ls": JPEGLSLossless, "jpeg 2000": JPEG2000Lossless}[name]
    return sw.save_compressed(ds, path, uid)


EXACT = [
    *sw.NATIVE,
    "rle",
    "jpeg-ls",
    "jpeg 2000",
    *[f"jpeg lossless, predictor {k}" for k in range(1, 8)],
]


@pytest.mark.parametrize("name", EXACT)
@pytest.mark.parametrize(("stored", "bits"), [(UNSIGNED, 12), (SIGNED, 16)], ids=["12u", "16s"])
def test_every_exact_encoding_gives_the_same_numbers(tmp_path, name, stored, bits):
    write_exact(tmp_path / "one", name, stored, bits)
    volume = read_series(tmp_path)
    assert volume.hu.dtype == np.int16
    assert np.array_equal(volume.hu[0], stored.astype(int) - 24)
    assert codes(volume) == set()


@pytest.mark.parametrize("name", ["rle", "jpeg-ls", "jpeg 2000", "jpeg lossless, predictor 1"])
def test_signed_values_of_fewer_bits_keep_their_sign(tmp_path, name):
    """JPEG-LS and lossless JPEG cannot say that values are signed."""
    stored = RNG.integers(-1000, 2048, (32, 32), dtype=np.int16)
    write_exact(tmp_path / "one", name, stored, 12)
    assert np.array_equal(read_series(tmp_path).hu[0], stored - 24)


def test_the_names_of_the_needed_decoders_are_in_the_entry(tmp_path):
    write_exact(tmp_path / "one", "jpeg 2000", UNSIGNED, 12)
    (entry,) = scan_series(tmp_path)
    assert entry.decoder == "JPEG 2000 lossless"
    assert entry.decoder_missing == ""


@pytest.mark.parametrize("error", [1, 5])
def test_near_lossless_jpeg_ls_errs_by_no_more_than_it_says_and_is_doubted(tmp_path, error):
    ds = image(UNSIGNED, 12)
    sw.save_compressed(ds, tmp_path / "one", JPEGLSNearLossless, jls_error=error)
    volume = read_series(tmp_path)
    worst = np.abs(volume.hu[0] - (UNSIGNED.astype(int) - 24)).max()
    assert 0 < worst <= error
    assert codes(volume) == {"lossy-compression"}


def test_near_lossless_jpeg_ls_is_doubted_although_its_tag_denies_it(tmp_path):
    ds = image(UNSIGNED, 12)
    sw.save_compressed(ds, tmp_path / "one", JPEGLSNearLossless, jls_error=3)
    changed = dcmread(tmp_path / "one")
    changed.LossyImageCompression = "00"
    changed.save_as(tmp_path / "one")
    assert scan_series(tmp_path)[0].cautions == ()
    assert codes(read_series(tmp_path)) == {"lossy-compression"}


def test_lossy_jpeg_2000_is_near_and_doubted(tmp_path):
    smooth = (sw.noise((64, 64)) - 1000).clip(0).astype(np.uint16)
    sw.save_compressed(image(smooth, 16), tmp_path / "one", JPEG2000, j2k_cr=[4])
    volume = read_series(tmp_path)
    difference = np.abs(volume.hu[0] - (smooth.astype(int) - 24))
    assert 0 < difference.max() < 20  # the noise is ±12; a wrong sign or shift errs by more
    assert codes(volume) == {"lossy-compression"}


def test_lossy_pixels_that_were_unpacked_again_are_still_doubted(tmp_path):
    sw.save(sw.ct_slice(UNSIGNED, LossyImageCompression="01"), tmp_path / "one")
    assert codes(read_series(tmp_path)) == {"lossy-compression"}


def extended_frame():
    """Return a real 12 bit extended JPEG frame, with its size."""
    ds = dcmread(get_testdata_file("JPGExtended.dcm"))
    frame = next(generate_frames(ds.PixelData, number_of_frames=1))
    return frame, (ds.Rows, ds.Columns)


def test_extended_12_bit_jpeg_is_read_as_another_decoder_reads_it(tmp_path):
    """SimpleITK brings a JPEG decoder of its own; two inverse transforms may round apart by 1."""
    import SimpleITK

    frame, shape = extended_frame()
    ds = image(np.zeros(shape, np.uint16), 12)
    file = sw.save_frames(ds, tmp_path / "one.dcm", JPEGExtended12Bit, [frame])
    volume = read_series(tmp_path)
    other = SimpleITK.GetArrayFromImage(SimpleITK.ReadImage(str(file)))
    assert np.abs(volume.hu.astype(int) - other).max() <= 1
    assert np.ptp(volume.hu) > 200
    assert codes(volume) >= {"lossy-compression"}


@pytest.mark.parametrize("missing", ["libjpeg", "openjpeg", "jpeg_ls"])
def test_a_missing_decoder_is_named_with_its_command(tmp_path, monkeypatch, missing):
    name, command = {
        "libjpeg": ("jpeg lossless, predictor 1", "pip install pylibjpeg pylibjpeg-libjpeg"),
        "openjpeg": ("jpeg 2000", "pip install pylibjpeg pylibjpeg-openjpeg"),
        "jpeg_ls": ("jpeg-ls", "pip install pyjpegls"),
    }[missing]
    write_exact(tmp_path / "one", name, UNSIGNED, 12)
    monkeypatch.setattr(syntaxes, "_importable", lambda _: False)
    (entry,) = scan_series(tmp_path)
    assert entry.decoder_missing == command
    with pytest.raises(DecoderMissingError, match=command):
        read_series(tmp_path)


def test_a_syntax_that_is_not_read_is_skipped_with_the_reason(tmp_path):
    sw.save_frames(image(UNSIGNED, 12), tmp_path / "one", "1.2.840.10008.1.2.4.100", [b"MPEG"])
    (skipped,) = scan_folder(tmp_path).skipped
    assert skipped.reason == "its transfer syntax is not one that is read here"
    assert skipped.damaged


@pytest.mark.parametrize("name", ["rle", "jpeg-ls", "jpeg 2000", "jpeg lossless, predictor 1"])
def test_a_frame_cut_short_is_an_error_without_a_sound(tmp_path, caplog, name):
    file = write_exact(tmp_path / "one", name, UNSIGNED, 12)
    ds = dcmread(file)
    frame = next(generate_frames(ds.PixelData, number_of_frames=1))
    sw.save_frames(ds, file, ds.file_meta.TransferSyntaxUID, [frame[: len(frame) // 4 * 2]])
    with caplog.at_level(logging.DEBUG), pytest.raises(SeriesError, match="damaged"):
        read_series(tmp_path)
    assert caplog.records == []


def test_a_frame_that_holds_another_plane_is_refused_before_it_is_decoded(tmp_path):
    ds = image(UNSIGNED, 12)
    big = lossless_jpeg.encode(np.zeros((8, 8), np.uint16), precision=12, predictor=1)
    claim = big.replace(b"\x00\x08\x00\x08", b"\xff\xff\xff\xff", 1)
    sw.save_frames(ds, tmp_path / "one", JPEGLosslessSV1, [claim])
    with pytest.raises(SeriesError, match="holds another plane"):
        read_series(tmp_path)


def test_padded_run_lengths_warn_nobody_in_any_thread(tmp_path):
    """The DICOM library warns of them; ten threads must neither see it nor lose other warnings."""
    ds = image(np.arange(25, dtype=np.uint16).reshape(5, 5), 12)
    sw.save_compressed(ds, tmp_path / "one", RLELossless)
    raw = (tmp_path / "one").read_bytes()
    start = raw.index(b"\x02\x00\x00\x00\x40\x00\x00\x00")  # two segments, the first at 64
    second = int.from_bytes(raw[start + 8 : start + 12], "little")
    segment = raw[start + second :]
    end = segment.index(b"\xfe\xff\xdd\xe0")
    # five more bytes of 0 after the last segment: a run that is one too many
    grown = segment[: end // 2 * 2] + b"\xfc\x00"
    body = raw[start : start + second] + grown
    frame = body + b"\0" * (len(body) % 2)
    again = image(np.zeros((5, 5), np.uint16), 12)
    sw.save_frames(again, tmp_path / "one", RLELossless, [frame])
    seen: list[object] = []

    def work():
        try:
            for _ in range(5):
                seen.append(read_series(tmp_path).hu[0].ravel().tolist())
        except Exception as problem:  # noqa: BLE001 - whatever it is, it must not be
            seen.append(problem)

    threads = [threading.Thread(target=work) for _ in range(10)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert seen == [[k - 24 for k in range(25)]] * 50
    with pytest.warns(UserWarning, match="something else"):
        warnings.warn("something else", UserWarning, stacklevel=1)


def test_codestreams_say_what_they_are(tmp_path):
    frame, shape = extended_frame()
    stream = codestream_of(frame)
    assert (stream.rows, stream.columns) == shape
    assert (stream.precision, stream.components, stream.exact) == (12, 1, False)
    exact = lossless_jpeg.encode(UNSIGNED, precision=12, predictor=4)
    assert codestream_of(exact).exact is True
    assert codestream_of(b"no stream at all") is None
