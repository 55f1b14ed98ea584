"""A folder served as one bucket in the manner of Google's store, in a process of its own.

Its client waits for answers without letting other threads of its process run.
"""

import json
import pathlib
import sys
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from urllib.parse import parse_qs, unquote, urlsplit


def described(path, folder):
    content = path.read_bytes()
    return {
        "kind": "storage#object", "name": str(path.relative_to(folder)), "bucket": folder.name,
        "size": str(len(content)), "etag": f"tag-{hash(content)}", "generation": "1",
        "metageneration": "1", "updated": "2026-01-02T03:04:05.678Z",
        "timeCreated": "2026-01-02T03:04:05.678Z",
    }  # fmt: skip


class Google(BaseHTTPRequestHandler):
    protocol_version = "HTTP/1.1"

    def do_GET(self):
        parts = urlsplit(self.path)
        query = parse_qs(parts.query)
        folder = self.server.folder
        bucket = f"/storage/v1/b/{folder.name}"
        path = folder / unquote(parts.path.removeprefix(f"{bucket}/o/"))
        if parts.path == bucket:
            return self.tell({"kind": "storage#bucket", "name": folder.name})
        if parts.path == f"{bucket}/o":
            prefix = query.get("prefix", [""])[0]
            every = [described(one, folder) for one in sorted(folder.rglob("*")) if one.is_file()]
            items = [one for one in every if one["name"].startswith(prefix)]
            return self.tell({"kind": "storage#objects", "items": items})
        if not path.is_file():
            return self.answer(404, b"{}")
        if query.get("alt") != ["media"]:
            return self.tell(described(path, folder))
        content = path.read_bytes()
        first, _, last = self.headers.get("Range", "bytes=0-").removeprefix("bytes=").partition("-")
        start, stop = int(first), min(int(last or len(content)) + 1, len(content))
        return self.answer(206, content[start:stop], f"bytes {start}-{stop - 1}/{len(content)}")

    def tell(self, plain):
        self.answer(200, json.dumps(plain).encode())

    def answer(self, status, body, stretch=None):
        self.send_response(status)
        self.send_header("Content-Length", str(len(body)))
        if stretch is not None:
            self.send_header("Content-Range", stretch)
        self.end_headers()
        self.wfile.write(body)

    def log_message(self, *words):
        pass


if __name__ == "__main__":
    server = ThreadingHTTPServer(("127.0.0.1", 0), Google)
    server.folder = pathlib.Path(sys.argv[1])
    print(server.server_port, flush=True)
    server.serve_forever()
