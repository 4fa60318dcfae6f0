"""The loop: linear model, gains and margins, estimator, control law, guard."""
