"""The plate as watched: estimator, forecast, alarms."""
