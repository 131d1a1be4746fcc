"""What an examination says to people: terminal, report, methods text, figures and a folder of files."""
