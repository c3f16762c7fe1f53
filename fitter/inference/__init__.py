"""From a log-posterior to draws: optimum, sampling, diagnostics, intervals, quadrature, evidence."""
