"""An invented rinse water that every reading of the flowsheet format must accept."""

from __future__ import annotations

TEXT = """
title = "Rinse water"
notice = "Invented for tests."

[feed]
flow = "10 m3/h"
operating_time = "6000 h/yr"
pH = 2.6
closing_ion = "SO4"
[feed.assay]
Cu = "120 mg/L"
Zn = "60 mg/L"
"Fe(II)" = "25 mg/L"
"Fe(III)" = "15 mg/L"
Na = "100 mg/L"
SO4 = "820 mg/L"

[plant]
max_stages = 2
overflow_solids = "5 mg/L"
carbon_dioxide_vent = "0.01 atm"

[prices]
water = "0.80 USD/m3"
disposal = { plain = "45 USD/t" }
metal = { Cu = "9000 USD/t" }

[reagents."hydrated lime"]
formula = "Ca(OH)2"
supply = "powder"
strength = "92 %"
utilisation = "90 %"
price = "190 USD/t"
make_up = "15 %"
max_dose = "20 kg/m3"

[reagents.caustic]
formula = "NaOH"
supply = "solution"
strength = "50 %"
price = "310 USD/t"

[oxidants.peroxide]
formula = "H2O2"
strength = "35 %"
price = "420 USD/t"
converts = "Fe(II)"
conversion = "98 %"

[[products]]
name = "copper cake"
metals = ["Cu"]
min_recovery = "50 %"
min_grade = "10 %"
max_impurity = { Fe = "30 %" }
payable = "40 %"
optional = true

[effluent]
pH = "6.0 to 10.0"
dissolved = { Cu = "1 mg/L", Zn = "10 mg/L", Fe = "2 mg/L" }

[[train]]
reagents = { caustic = "pH 4.2" }
oxidant = "peroxide"
cake = "waste"

[[train]]
reagents = { "hydrated lime" = "pH 9.0" }
cake = "copper cake"
"""
