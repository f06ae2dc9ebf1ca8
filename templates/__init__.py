"""Blank files for users and page templates for reports."""
