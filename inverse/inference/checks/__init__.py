"""What the data added, whether the model describes the trace, and what each number rests on."""
