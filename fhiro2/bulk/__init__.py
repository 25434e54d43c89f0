"""What all ways of reading much at once share: taking in sources, context first, and closing the account."""
