"""What people look at and hand over: the page, the hand-over files, the methods paragraph, the pictures.

Everything here only reads stage files. `source` reads a run folder, `write` writes into it; all between them are
pure functions from tables to rows, texts and bytes.
"""
