"""The kinds of stage: each sizes its charges and writes its steps."""
