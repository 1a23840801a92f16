"""Is it right? Scores of predicted clouds against observed ones, each with its error."""
