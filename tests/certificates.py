"""An authority, a server's and a client's certificate, made afresh for a test."""

import subprocess
from pathlib import Path

KEY = ["-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes"]


def openssl(*arguments: str) -> None:
    subprocess.run(["openssl", *arguments], check=True, capture_output=True)


class Authority:
    """Signs certificates; the files stand in its folder as NAME.crt and NAME.key."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        folder.mkdir(parents=True, exist_ok=True)
        extensions = ["-addext", "basicConstraints=critical,CA:TRUE", "-addext", "keyUsage=critical,keyCertSign"]
        openssl(
            *("req", "-x509", *KEY, "-days", "2", "-subj", "/CN=tileworks authority", *extensions),
            *("-keyout", str(folder / "ca.key"), "-out", str(folder / "ca.crt")),
        )

    @property
    def certificate(self) -> Path:
        return self.folder / "ca.crt"

    def issue(self, name: str, usage: str, days: int = 2, host: str = "localhost") -> tuple[Path, Path]:
        """Return certificate and key for `serverAuth` or `clientAuth`; with 0 days it has expired."""
        request, key, certificate = (self.folder / f"{name}.{end}" for end in ("csr", "key", "crt"))
        extensions = self.folder / f"{name}.ext"
        extensions.write_text(f"subjectAltName=DNS:{host},IP:127.0.0.1\nextendedKeyUsage={usage}\n")
        openssl("req", *KEY, "-subj", f"/CN={name}", "-keyout", str(key), "-out", str(request))
        openssl(
            *("x509", "-req", "-in", str(request), "-CA", str(self.certificate), "-CAkey", str(self.folder / "ca.key")),
            *("-CAcreateserial", "-days", str(days), "-extfile", str(extensions), "-out", str(certificate)),
        )
        return certificate, key


def locked(key: Path) -> Path:
    """Return a copy of a key that needs a pass phrase."""
    copy = key.with_suffix(".locked")
    openssl("ec", "-in", str(key), "-out", str(copy), "-aes128", "-passout", "pass:kiln")
    return copy
