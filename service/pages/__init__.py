"""The small pages that people read: self-contained HTML, nothing fetched from outside."""
