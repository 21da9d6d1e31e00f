"""The waiting service: the one address that clients ask, and where a request may wait.

It stands before the web service and passes everything on. A GET with `Prefer: wait=N` is held
here while the answer says Retry-After, so that waiting takes no web worker and no database
connection. It knows nothing of tokens or rights: every answer is the web service's own.

    python -m labplan.operations.waiting --listen 127.0.0.1:8000 --web unix:/run/web.sock

No Django in here (kept by import-linter): it starts at once and stays small.
"""
