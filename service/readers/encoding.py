"""How text is encoded, told from its first bytes."""

import codecs

UTF8_MARK = codecs.BOM_UTF8
UTF16_MARKS = (codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)


def text_encoding(head: bytes) -> str:
    """Name of the codec: by byte-order mark, else UTF-8, else (any byte goes) Latin-1.

    `head` may end in mid-character.
    """
    if head.startswith(UTF16_MARKS):
        return "utf-16"
    if head.startswith(UTF8_MARK):
        return "utf-8-sig"
    try:
        codecs.getincrementaldecoder("utf-8")("strict").decode(head)
    except UnicodeDecodeError:
        return "latin-1"
    return "utf-8"
