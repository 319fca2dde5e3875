"""Report: what people read and audit."""
