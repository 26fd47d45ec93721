"""The shell around the core: video, sheets, layouts, result folders, exports and tables."""
