"""Models from traces, settings from models: identification, reduction, synthesis, margins."""
