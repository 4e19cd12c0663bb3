"""Fitting: from rows to a model. `fit` is the flow, `first_pass` looks at the rows, `em` runs the passes, `notes` says
what the reader of the model should know."""
