"""A file server on loopback that fsspec speaks to (webhdfs: HTTP with ranges as parameters), which counts what it serves."""

from __future__ import annotations

import json
import threading
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, unquote, urlsplit

PREFIX = "/webhdfs/v1"


class Served:
    """A folder served; `bytes` and `requests` count what was read of files, by name, and `broken` are names that fail."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.broken = folder, set[str]()
        self.bytes, self.requests = dict[str, int](), dict[str, int]()
        served = self

        class Handler(BaseHTTPRequestHandler):
            protocol_version = "HTTP/1.1"
            wbufsize = -1  # headers and body at once: sent apart, each answer would wait for the client's word

            def do_GET(self) -> None:
                url = urlsplit(self.path)
                asked = {name: values[0] for name, values in parse_qs(url.query).items()}
                answer = served.answer(unquote(url.path).removeprefix(PREFIX).strip("/"), asked)
                code, body = answer if isinstance(answer[1], bytes) else (answer[0], json.dumps(answer[1]).encode())
                self.send_response(code)
                self.send_header("Content-Length", str(len(body)))
                self.end_headers()
                self.wfile.write(body)

            def log_message(self, *_: Any) -> None:
                """Nothing is printed."""

        self.server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self.url = f"webhdfs://127.0.0.1:{self.server.server_address[1]}"
        threading.Thread(target=self.server.serve_forever, kwargs={"poll_interval": 0.01}, daemon=True).start()

    def answer(self, name: str, asked: dict[str, str]) -> tuple[int, Any]:
        """Status and body of one request."""
        path = self.folder / name
        if not path.exists():
            return 404, failure("FileNotFoundException", f"there is no {name}")
        if asked["op"] == "GETFILESTATUS":
            return 200, {"FileStatus": status(path)}
        if asked["op"] == "LISTSTATUS":
            if name in self.broken:
                return 403, failure("AccessControlException", "not for you")
            inside = sorted(path.iterdir()) if path.is_dir() else [path]
            return 200, {"FileStatuses": {"FileStatus": [status(p) | {"pathSuffix": p.name} for p in inside]}}
        if name in self.broken:
            return 500, failure("IOException", "a disk is broken")
        offset = int(asked.get("offset", 0))
        content = path.read_bytes()[offset : offset + int(asked["length"])]
        self.bytes[name] = self.bytes.get(name, 0) + len(content)
        self.requests[name] = self.requests.get(name, 0) + 1
        return 200, content

    def close(self) -> None:
        """Serve no more."""
        self.server.shutdown()
        self.server.server_close()


def status(path: Path) -> dict[str, Any]:
    """What the server tells of a file or folder, times in milliseconds."""
    found = path.stat()
    kind = "DIRECTORY" if path.is_dir() else "FILE"
    return {"type": kind, "length": found.st_size, "modificationTime": found.st_mtime_ns // 1_000_000, "pathSuffix": ""}


def failure(kind: str, message: str) -> dict[str, Any]:
    """What the server says where something is wrong."""
    return {"RemoteException": {"exception": kind, "message": message}}
