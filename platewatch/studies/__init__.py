"""Offline work on a plate."""
