"""The words on the wire: what a request may say and what an answer says; no arithmetic, no HTTP."""
