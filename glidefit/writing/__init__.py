"""Files and pages out."""
