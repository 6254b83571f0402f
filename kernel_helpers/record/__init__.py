"""What is handed on: code that repeats a determination."""
