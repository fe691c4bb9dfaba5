"""How fast UT1 drifts from an extrapolation: settles the growth of `ut1_sigma_s` beyond the tables.

    python docs/notes/ut1_growth.py

Extrapolates from every half year of 1975 to the end of the tables as `planner/sky/rotation.py` does (last value, mean
rate of the year before it) and compares with what came.
"""

import numpy as np

from planner.sky.rotation import YEAR_S, earth_orientation, ut1_sigma_s

table = earth_orientation()
inside = (table.tt_s >= table.first_table_tt_s) & (table.tt_s <= table.last_table_tt_s)
year, delta_t = table.tt_s[inside] / YEAR_S + 2000.0, table.delta_t_s[inside]
print("| years ahead | rms, s | largest, s | stated 1-sigma, s | starts |")
print("|---|---|---|---|---|")
for ahead in (0.5, 1, 2, 5, 10, 20):
    errors = []
    for start in np.arange(1975.0, year[-1] - ahead, 0.5):
        before = (year > start - 1) & (year <= start)
        rate = np.polyfit(year[before], delta_t[before], 1)[0]
        guess = np.interp(start, year, delta_t) + rate * ahead
        errors.append(guess - np.interp(start + ahead, year, delta_t))
    stated = ut1_sigma_s(table.last_table_tt_s + ahead * YEAR_S)
    rms, worst = np.sqrt(np.mean(np.square(errors))), np.abs(errors).max()
    print(f"| {ahead:g} | {rms:.2f} | {worst:.2f} | {stated:.2f} | {len(errors)} |")
