"""Files in: assay sheets, track tables, videos, settings."""
