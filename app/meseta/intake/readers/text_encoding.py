"""The encoding of a text: by its mark, the zeros of UTF-16, by being valid UTF-8, or by the letters it would have."""

from __future__ import annotations

import re
from contextlib import suppress
from typing import Final

__all__ = ["ENCODINGS", "decode_head"]

HEAD_LINES: Final = 400
ENCODINGS: Final = {"latin-1": "Latin-1", "cp932": "Shift-JIS", "gb18030": "GB 18030", "cp1251": "Windows-1251"}
"""Encodings that are taken for what they are by their letters alone, and their usual names."""
_OLDER: Final = {
    "cp932": r"[ー-龯々〇\u3041-\u30ffΑ-ωА-я（）／・、。Åμ]+",
    "gb18030": r"[\u4e00-\u9fff（）／、。，：μΩ]+",
    "cp1251": r"[А-Яа-яЁё²µ°]+",
}
"""Encodings of headings before UTF-8, and the letters that words in them are made of."""
_SIGNS_OF: Final = {
    "cp932": rb"(?s)[\x81-\x98].*[\x81-\x98]",
    "gb18030": rb"[\xa1-\xfe]{4}",
    "cp1251": rb"(?s)\A(?!.*(?:[A-Za-z][\xc0-\xff]|[\xc0-\xff][A-Za-z])).*[\xc0-\xff]{3}",
}
"""Bytes that each of them has, and that Latin-1 has not, or not in such a row."""


def decode_head(data: bytes) -> str:
    """Return the name of the encoding of a text: by its mark, by the zeros of UTF-16, by being valid UTF-8."""
    if data.startswith(b"\xef\xbb\xbf"):
        return "utf-8-sig"
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16"
    sample = data[:2000]
    if len(sample) > 3 and sample.count(0) > len(sample) // 3:
        return "utf-16-le" if sample[1::2].count(0) > sample[0::2].count(0) else "utf-16-be"
    try:
        data[: len(data) - len(data) % 4096 or len(data)].decode("utf-8")
    except UnicodeDecodeError as error:
        if error.start < len(data) - 4:
            return _older_encoding(data)
    return "utf-8"


def _older_encoding(data: bytes) -> str:
    """Return the encoding of a text that is not UTF-8, by which letters its lines with such bytes would have."""
    lines = b"\n".join(line for line in data.split(b"\n")[:HEAD_LINES] if any(byte > 127 for byte in line))
    for encoding, letters in _OLDER.items():
        with suppress(UnicodeDecodeError):
            words = re.findall(r"[^\x00-\x7f]+", lines.decode(encoding))
            fits = bool(words) and all(re.fullmatch(letters, word) for word in words) and max(map(len, words)) > 1
            if fits and re.search(_SIGNS_OF[encoding], lines):
                return encoding
    return "latin-1"
