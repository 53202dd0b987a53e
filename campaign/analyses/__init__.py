"""One module per question: features in, frozen result out."""
