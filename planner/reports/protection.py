"""A password on a PDF: AES-256 through the optional packages of the extra ``password``."""

from __future__ import annotations

from importlib.util import find_spec
from io import BytesIO

from planner.diagnostics import PlannerError


def check_available() -> None:
    """Refuse where the packages for it are missing.

    Raises
    ------
    PlannerError
        Names the missing packages and the command that installs them.
    """
    missing = [package for package in ("pypdf", "cryptography") if find_spec(package) is None]
    if missing:
        raise PlannerError(
            f"a password needs the package{'s' if len(missing) > 1 else ''} {' and '.join(missing)}, not "
            "installed here; install with: pip install '.[password]'"
        )


def protected(document: bytes, password: str) -> bytes:
    """Return the PDF encrypted with AES-256 (PDF 2.0): needed to open it; printing stays allowed.

    Raises
    ------
    PlannerError
        See `check_available`.
    """
    check_available()
    from pypdf import PdfReader, PdfWriter

    writer = PdfWriter(clone_from=PdfReader(BytesIO(document)))
    writer.encrypt(password, algorithm="AES-256")
    buffer = BytesIO()
    writer.write(buffer)
    return buffer.getvalue()
