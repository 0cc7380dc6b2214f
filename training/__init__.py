"""Build, check and publish estimators: sets, fits, bundles."""
