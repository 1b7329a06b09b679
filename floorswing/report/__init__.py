"""The report: one page with the answer, the pictures, the evidence and the record; and the annotated clip."""
