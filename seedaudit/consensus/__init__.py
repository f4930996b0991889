"""What the audit concludes: functions on arrays, free of paths, images, settings and figures."""
