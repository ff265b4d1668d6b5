"""One builder a result: what a panel displays and what a memo keeps."""
