"""What a fit looks like to people: figures, sentences and one page that opens anywhere."""
