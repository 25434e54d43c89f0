"""Servers on this machine that answer as a test tells them, down to the bytes, and certificates for them."""

from __future__ import annotations

import ssl
import subprocess
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

Answering = Callable[[BaseHTTPRequestHandler, int], None]
"""Answers one request; the number counts the server's requests from 1."""

_CERTIFICATES = """
import datetime, sys
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import ec
now = datetime.datetime.now(datetime.timezone.utc)
for name, host, days in (("good", "localhost", 1), ("expired", "localhost", -1), ("other", "other.example", 1)):
    key = ec.generate_private_key(ec.SECP256R1())
    subject = x509.Name([x509.NameAttribute(x509.NameOID.COMMON_NAME, host)])
    certificate = (
        x509.CertificateBuilder().subject_name(subject).issuer_name(subject).public_key(key.public_key())
        .serial_number(x509.random_serial_number()).not_valid_before(now - datetime.timedelta(days=2))
        .not_valid_after(now + datetime.timedelta(days=days))
        .add_extension(x509.SubjectAlternativeName([x509.DNSName(host)]), False)
        .add_extension(x509.BasicConstraints(ca=True, path_length=None), True)
        .sign(key, hashes.SHA256())
    )
    with open(f"{sys.argv[1]}/{name}.pem", "wb") as file:
        file.write(certificate.public_bytes(serialization.Encoding.PEM))
        file.write(key.private_bytes(serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8,
                                     serialization.NoEncryption()))
"""


class Server(ThreadingHTTPServer):
    """Keeps what arrived: method, path, headers of each request."""

    daemon_threads = True

    def __init__(self, answering: Answering) -> None:
        self.seen: list[tuple[str, str, dict[str, str]]] = []
        self.bodies: list[bytes] = []
        lock = threading.Lock()
        outer = self

        class Handler(BaseHTTPRequestHandler):
            protocol_version = "HTTP/1.1"

            def handle_any(self) -> None:
                with lock:
                    outer.bodies.append(self.rfile.read(int(self.headers.get("Content-Length", 0))))
                    outer.seen.append((self.command, self.path, dict(self.headers)))
                    number = len(outer.seen)
                answering(self, number)

            do_GET = do_PUT = do_POST = handle_any  # noqa: N815

            def log_message(self, *_: object) -> None:
                """Keep silent."""

        super().__init__(("127.0.0.1", 0), Handler)

    def handle_error(self, *_: object) -> None:
        """A client that leaves early is what some tests are about."""


@contextmanager
def serving(answering: Answering, certificate: Path | None = None) -> Iterator[tuple[Server, str]]:
    """A server and its base URL, with TLS where a certificate (and key) is given."""
    server = Server(answering)
    scheme, host = "http", "127.0.0.1"
    if certificate is not None:
        context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
        context.load_cert_chain(certificate)
        server.socket = context.wrap_socket(server.socket, server_side=True, do_handshake_on_connect=False)
        scheme, host = "https", "localhost"
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    try:
        yield server, f"{scheme}://{host}:{server.server_address[1]}/fhir"
    finally:
        server.shutdown()
        thread.join()
        server.server_close()


def reply(handler: BaseHTTPRequestHandler, status: int, body: bytes, **headers: str) -> None:
    """A complete answer."""
    handler.send_response(status)
    for name, value in ({"Content-Length": str(len(body))} | headers).items():
        handler.send_header(name, value)
    handler.end_headers()
    handler.wfile.write(body)


def drip(handler: BaseHTTPRequestHandler, head: bytes, dripping: bytes, over: threading.Event) -> None:
    """Send ``head`` at once and then one byte of ``dripping`` every 20 ms, until ``over``."""
    with suppress(OSError):
        handler.wfile.write(head)
        for number in range(len(dripping)):
            if over.wait(0.02):
                break
            handler.wfile.write(dripping[number : number + 1])
    handler.close_connection = True


def certificates(python: str, folder: Path) -> Path:
    """Self-signed certificates with their keys in ``folder``: good, expired, other (for another host)."""
    subprocess.run([python, "-c", _CERTIFICATES, str(folder)], check=True, timeout=60)
    return folder
