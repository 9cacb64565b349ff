"""What leaves the program for people: tables, texts, figures."""
