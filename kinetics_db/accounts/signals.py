"""What happens to accounts, told to whoever stands above: the audit trail listens."""

from django.dispatch import Signal

account_written = Signal()
"""Sent inside the write's transaction with ``user`` (whose account it is) and ``verb``."""
