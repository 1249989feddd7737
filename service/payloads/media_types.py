"""The media types of the tables that can be read."""

CSV = "text/csv"
ARROW = "application/vnd.apache.arrow.stream"
PARQUET = "application/vnd.apache.parquet"
