"""The main job: one run sheet in, one result out. The only room that joins calibration, following and analysis."""

from tracker.measure.run import Measured, measure_run

__all__ = ["Measured", "measure_run"]
