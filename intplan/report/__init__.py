"""Answers in words, JSON objects and tree files; it reads answers and changes nothing."""
