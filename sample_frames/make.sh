#!/bin/sh
# The recipe of the sample frames: run it in this folder, with syzygraph installed. What exists is kept.
set -e
syzygraph plan ../configs/mercury_transit_2032.yaml -o transit.plan.yaml
syzygraph rehearse transit.plan.yaml -o transit --frames 5 --binning 8 --clock-offset 7.3 --seed 5
syzygraph plan ../configs/moon_occults_planet_2030.yaml -o occultation.plan.yaml
syzygraph rehearse occultation.plan.yaml -o occultation --passage approach --frames 2 --binning 8 --clock-offset 7.3 --seed 5
syzygraph plan ../configs/mars_retrograde_2027.yaml -o retrograde.plan.yaml
syzygraph rehearse retrograde.plan.yaml -o retrograde --frames 3 --binning 4 --crop 640x480 --seed 5
