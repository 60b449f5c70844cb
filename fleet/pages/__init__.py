"""Pages: what a manager, an operator and an analyst read, each one self-contained HTML file.

Owns layout, words and charts. Every figure comes from the record (records.py), or, before a call, from a survey
of the fleet folder; nothing is decided here. No network, no script, no clock: the same record gives the same
bytes.
"""
