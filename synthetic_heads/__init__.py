"""Invented heads, caps and recordings with known answers; a second witness that shares no code with the tool."""
