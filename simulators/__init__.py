"""An independent world to judge the daemon by. Its physics shares no formula with analysis."""
