"""The one error of everything that checks certificates."""


class CertificateError(ValueError):
    """A certificate that proves less than it says, or nothing; the message says what is wrong."""
