"""One instrument through PyVISA and pyvisa-py, as any script would open it."""

import pyvisa
from pyvisa.resources import MessageBasedResource


class VisaLine:
    """A line to the instrument at any VISA address."""

    def __init__(self, address: str) -> None:
        # One resource manager serves the whole process, so that it is not closed here.
        manager = pyvisa.ResourceManager("@py")
        resource = manager.open_resource(
            address, read_termination="\n", write_termination="\n", timeout=10_000
        )
        assert isinstance(resource, MessageBasedResource)
        self.resource = resource

    def write(self, text: str) -> None:
        self.resource.write(text)

    def ask(self, text: str) -> str:
        return self.resource.query(text)

    def ask_block(self, text: str, *, before: bytes = b"", behind: bytes = b"\n") -> bytes:
        self.resource.write(text)
        assert self.resource.read_bytes(len(before) + 1) == before + b"#"
        digits = int(self.resource.read_bytes(1))
        payload = self.resource.read_bytes(int(self.resource.read_bytes(digits)))
        assert not behind or self.resource.read_bytes(len(behind)) == behind
        return payload

    def close(self) -> None:
        self.resource.close()
