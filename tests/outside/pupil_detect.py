"""Runs pupil-apriltags on grey frames in a process of its own: `python pupil_detect.py frames.npy` prints JSON.

For each frame a list of detections {id, centre, corners}, in that detector's own pixel convention (0.5 px more than OpenCV's).
Corners are reordered to this project's: top left, top right, bottom right, bottom left of the upright tag, where upright is as OpenCV
draws the family; that detector's own upright is turned by 180 degrees.
"""

import json
import os
import sys

import numpy as np
from pupil_apriltags import Detector

frames = np.load(sys.argv[1])
detector = Detector(families="tag36h11", quad_decimate=1.0, refine_edges=1)
found = [
    [{"id": int(d.tag_id), "centre": d.center.tolist(), "corners": d.corners[[1, 0, 3, 2]].tolist()} for d in detector.detect(frame)]
    for frame in frames
]
json.dump(found, sys.stdout)
sys.stdout.flush()
os._exit(0)  # its clean-up can crash; nothing is left to clean
