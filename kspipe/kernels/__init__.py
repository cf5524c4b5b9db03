"""Plain functions on arrays: no unit objects, no headers, no files, no logging."""
