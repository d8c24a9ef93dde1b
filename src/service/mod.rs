//! The unattended daemon.
