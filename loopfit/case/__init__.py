"""Case files: record, controller, target and limits of one commissioning job."""
