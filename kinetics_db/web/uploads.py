"""What comes in with a form: a file beyond the limit is read to its end and thrown away, so that its size is known
and the answer can say so; nothing of it beyond the limit reaches the disk."""

from __future__ import annotations

from typing import Any

from django.conf import settings
from django.core.files.uploadedfile import SimpleUploadedFile
from django.core.files.uploadhandler import FileUploadHandler


class TooLargeFile(SimpleUploadedFile):
    """Stands for a file that was not kept; only its name and its size are known."""

    def __init__(self, name: str, size: int):
        super().__init__(name, b"")
        self.size = size


class LimitedUpload(FileUploadHandler):
    """Stands before the handlers that keep files, and gives them no more than `MAX_FILE_BYTES` of a file."""

    def new_file(self, *args: Any, **kwargs: Any) -> None:
        """Begin to count anew."""
        super().new_file(*args, **kwargs)
        self.received = 0

    def receive_data_chunk(self, raw_data: bytes, start: int) -> bytes | None:
        """Hand a piece on while there is room for it."""
        self.received += len(raw_data)
        return raw_data if self.received <= settings.MAX_FILE_BYTES else None

    def file_complete(self, file_size: int) -> TooLargeFile | None:
        """Leave a file within the limit to the other handlers."""
        if self.received <= settings.MAX_FILE_BYTES:
            return None
        return TooLargeFile(self.file_name or "", self.received)
