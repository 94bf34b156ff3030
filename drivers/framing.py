"""Lines out of a stream of bytes: however the stream is cut, the same frames come out, and memory stays bounded."""

from __future__ import annotations

#: longest line that is taken, end mark not counted; ours stay under 200 bytes
LONGEST_FRAME_BYTES = 1024


class FrameReader:
    """Collects bytes and gives out finished lines without their end mark (a carriage return before it goes too)."""

    __slots__ = ("_dropping", "_end", "_held", "_longest")

    def __init__(self, end: bytes = b"\n", longest: int = LONGEST_FRAME_BYTES) -> None:
        if len(end) > 1:
            raise ValueError(f"end mark: got {end!r}, allowed: one byte, or none for a grammar without lines")
        self._end, self._longest = end, longest
        self._held = b""
        self._dropping = False

    @property
    def held(self) -> bool:
        """Whether part of a line is waiting for its end."""
        return self._dropping or bool(self._held)

    @property
    def waiting(self) -> int:
        """Bytes without an end that are held."""
        return len(self._held)

    def take(self, count: int) -> bytes:
        """Return and forget up to `count` of the bytes that are held, for a grammar without lines."""
        taken, self._held = self._held[:count], self._held[count:]
        return taken

    def clear(self) -> None:
        """Forget a line that has begun."""
        self._held, self._dropping = b"", False

    def feed(self, data: bytes) -> list[bytes | None]:
        """Take `data` and return each line finished by it; None stands for a line that was too long."""
        if not self._end:
            self._held = (self._held + data)[-self._longest :]
            return []
        *ends, rest = (self._held + data).split(self._end) if self._held else data.split(self._end)
        frames: list[bytes | None] = []
        for line in ends:
            if self._dropping or len(line) > self._longest:
                frames.append(None)
                self._dropping = False
            else:
                frames.append(line[:-1] if line.endswith(b"\r") else line)
        if len(rest) > self._longest:
            self._dropping = True
        self._held = b"" if self._dropping else rest
        return frames
