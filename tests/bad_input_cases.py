"""Malformed flowsheet files: what is changed, and the key that the answer must name."""

GOOD = """\
title = "rinse"

[feed]
flow = "12 m3/h"
operating_time = "6000 h/yr"
temperature = "25 degC"
pH = 2.5
closing_ion = "SO4"

[feed.assay]
Cu = "95 mg/L"
Zn = "60 mg/L"
"Fe(II)" = "40 mg/L"
Na = "100 mg/L"
SO4 = "720 mg/L"

[plant]
max_stages = 2
overflow_solids = "10 mg/L"

[plant.cake_moisture]
hydroxide = "60 %"

[prices]
water = "0.80 USD/m3"
disposal = { plain = "45 USD/t" }
metal = { Cu = "9000 USD/t" }

[reagents.lime]
formula = "Ca(OH)2"
supply = "powder"
strength = "92 %"
utilisation = "90 %"
price = "190 USD/t"
make_up = "15 %"

[oxidants.peroxide]
formula = "H2O2"
strength = "35 %"
price = "420 USD/t"
converts = "Fe(II)"
conversion = "98 %"

[[products]]
name = "copper cake"
metals = ["Cu"]
min_grade = "35 %"
max_impurity = { Fe = "4 %" }
payable = "50 %"

[waste]
class = "plain"

[effluent]
pH = "6.0 to 9.5"

[effluent.dissolved]
Cu = "0.5 mg/L"

[[train]]
reagents = { lime = "pH 9.0" }
oxidant = "peroxide"
cake = "waste"
"""


def changed(old: str, new: str) -> str:
    assert old in GOOD, old
    return GOOD.replace(old, new, 1)


#: (id, file text, words the answer must hold)
CASES = [
    ("broken-toml", GOOD + "\n[feed", ("valid TOML",)),
    ("empty", "", ("empty",)),
    ("only-a-comment", "# nothing here\n", ("empty",)),
    ("no-title", changed('title = "rinse"\n', ""), ("title", "missing")),
    ("title-a-number", changed('title = "rinse"', "title = 3"), ("title", "not text")),
    ("no-feed", "title = 'x'\n[effluent]\n", ("feed", "missing")),
    ("no-effluent", GOOD.split("[effluent]", maxsplit=1)[0], ("effluent", "missing")),
    ("no-flow", changed('flow = "12 m3/h"\n', ""), ("feed.flow", "missing")),
    ("flow-no-unit", changed('"12 m3/h"', '"12"'), ("feed.flow", "unit")),
    ("flow-a-number", changed('"12 m3/h"', "12"), ("feed.flow", "unit")),
    ("flow-wrong-dimension", changed('"12 m3/h"', '"12 kg/h"'), ("feed.flow", "dimension")),
    ("flow-unknown-unit", changed('"12 m3/h"', '"12 buckets/h"'), ("feed.flow", "not known")),
    ("flow-negative", changed('"12 m3/h"', '"-12 m3/h"'), ("feed.flow", "negative")),
    ("flow-zero", changed('"12 m3/h"', '"0 m3/h"'), ("feed.flow", "below")),
    ("flow-typo", changed("flow =", "flwo ="), ("feed.flwo", "flow")),
    ("too-many-hours", changed("6000 h/yr", "9999 h/yr"), ("feed.operating_time", "above")),
    ("boiling", changed("25 degC", "140 degC"), ("feed.temperature", "above")),
    ("pH-17", changed("pH = 2.5", "pH = 17"), ("feed.pH", "outside")),
    ("pH-text", changed("pH = 2.5", 'pH = "2.5"'), ("feed.pH", "not a number")),
    ("pH-bool", changed("pH = 2.5", "pH = true"), ("feed.pH", "not a number")),
    ("closing-unknown", changed('closing_ion = "SO4"', 'closing_ion = "Xx"'),
     ("feed.closing_ion", "no ion")),
    ("closing-on-pH", changed('closing_ion = "SO4"', 'closing_ion = "proton"'),
     ("feed.closing_ion",)),
    ("assay-unknown", changed('Zn = "60', 'Unobtainium = "60'), ("feed.assay.Unobtainium",)),
    ("assay-element-with-two-states", changed('"Fe(II)" = "40', 'Fe = "40'),
     ("feed.assay.Fe", "Fe(II)")),
    ("assay-not-text", changed('"60 mg/L"', "60"), ("feed.assay.Zn", "unit")),
    ("assay-negative", changed('"60 mg/L"', '"-60 mg/L"'), ("feed.assay.Zn", "negative")),
    ("assay-wrong-unit", changed('"60 mg/L"', '"60 degC"'), ("feed.assay.Zn",)),
    ("assay-as-nonsense", changed('"60 mg/L"', '"60 mg/L as N"'), ("feed.assay.Zn", "as N")),
    ("assay-ppm-without-gravity", changed('"60 mg/L"', '"60 ppm"'),
     ("feed.assay.Zn", "specific_gravity")),
    ("assay-is-text", changed("[feed.assay]", "assay = 'lots'\n[feed.other]"), ("feed.assay",)),
    ("stages-zero", changed("max_stages = 2", "max_stages = 0"), ("plant.max_stages",)),
    ("stages-text", changed("max_stages = 2", 'max_stages = "2"'), ("plant.max_stages",)),
    ("stages-nine", changed("max_stages = 2", "max_stages = 9"), ("plant.max_stages",)),
    ("moisture-family", changed("hydroxide =", "hydroxyde ="),
     ("plant.cake_moisture.hydroxyde", "hydroxide")),
    ("moisture-all-water", changed('"60 %"', '"99 %"'), ("plant.cake_moisture.hydroxide",)),
    ("price-negative", changed('"190 USD/t"', '"-190 USD/t"'), ("reagents.lime.price", "negative")),
    ("price-per-volume", changed('"190 USD/t"', '"190 USD/m3"'), ("reagents.lime.price",)),
    ("strength-120", changed('"92 %"', '"120 %"'), ("reagents.lime.strength", "above")),
    ("strength-no-percent", changed('"92 %"', '"0.92"'), ("reagents.lime.strength", "%")),
    ("strength-zero", changed('"92 %"', '"0 %"'), ("reagents.lime.strength", "zero")),
    ("formula-nonsense", changed('"Ca(OH)2"', '"lime"'), ("reagents.lime.formula",)),
    ("formula-unknown-element", changed('"Ca(OH)2"', '"Sr(OH)2"'),
     ("reagents.lime.formula", "Sr")),
    ("formula-charged", changed('"Ca(OH)2"', '"Ca+2"'), ("reagents.lime.formula", "charge")),
    ("supply-gas", changed('supply = "powder"', 'supply = "gas"'), ("reagents.lime.supply",)),
    ("reagents-a-list", changed("[reagents.lime]", "[[reagents]]"), ("reagents",)),
    ("oxidant-formula", changed('"H2O2"', '"KMnO4"'), ("oxidants.peroxide.formula",)),
    ("oxidant-converts", changed('converts = "Fe(II)"', 'converts = "Mn"'),
     ("oxidants.peroxide.converts",)),
    ("oxidant-price-kind", changed('"420 USD/t"', '"420 USD/m3"'), ("oxidants.peroxide.price",)),
    ("product-no-metals", changed('metals = ["Cu"]\n', ""), ("products[1].metals", "missing")),
    ("product-metal-absent", changed('metals = ["Cu"]', 'metals = ["Ni"]').replace(
        'payable = "50 %"\n', ""),
     ("products[1].metals", "not in the feed")),
    ("product-called-waste", changed('name = "copper cake"', 'name = "waste"'),
     ("products[1].name",)),
    ("product-unpaid-metal", changed('metal = { Cu = "9000 USD/t" }', "metal = {}"),
     ("prices.metal.Cu", "missing")),
    ("product-impurity-unknown", changed("{ Fe =", "{ Zz ="), ("products[1].max_impurity.Zz",)),
    ("payable-a-number", changed('payable = "50 %"', "payable = 0.5"), ("products[1].payable",)),
    ("two-products-one-name", GOOD.replace("[waste]", '[[products]]\nname = "copper cake"\n'
                                           'metals = ["Cu"]\n\n[waste]'), ("products[2].name",)),
    ("waste-class-unpriced", changed('class = "plain"', 'class = "hazardous"'),
     ("waste.class", "plain")),
    ("window-backwards", changed('"6.0 to 9.5"', '"9.5 to 6.0"'), ("effluent.pH",)),
    ("window-a-number", changed('pH = "6.0 to 9.5"', "pH = 9.5"), ("effluent.pH",)),
    ("limit-on-nothing", changed('Cu = "0.5 mg/L"', 'Ni = "0.5 mg/L"'),
     ("effluent.dissolved.Ni",)),
    ("limit-zero", changed('"0.5 mg/L"', '"0 mg/L"'), ("effluent.dissolved.Cu", "zero")),
    ("solid-unknown", GOOD + '\n[solids]\nallow = ["geothite"]\n', ("solids.allow", "goethite")),
    ("train-reagent-unknown", changed('{ lime = "pH 9.0" }', '{ lyme = "pH 9.0" }'),
     ("train[1].reagents.lyme", "lime")),
    ("train-dose-nonsense", changed('"pH 9.0"', '"a lot"'), ("train[1].reagents.lime",)),
    ("train-dose-negative", changed('"pH 9.0"', '"-1 kg/m3"'), ("train[1].reagents.lime",)),
    ("train-pH-99", changed('"pH 9.0"', '"pH 99"'), ("train[1].reagents.lime", "outside")),
    ("train-oxidant-unknown", changed('oxidant = "peroxide"', 'oxidant = "ozone"'),
     ("train[1].oxidant", "peroxide")),
    ("train-cake-unknown", changed('cake = "waste"', 'cake = "coper cake"'),
     ("train[1].cake", "copper cake")),
    ("flow-of-two-lines", changed('"12 m3/h"', '"12\\nm3/x"'), ("feed.flow", "\\n")),
    ("decimal-comma", changed('"60 mg/L"', '"0,060 g/L"'), ("feed.assay.Zn", "thousands")),
    ("ton-of-two-sizes", changed('"190 USD/t"', '"190 USD/ton"'),
     ("reagents.lime.price", "short_ton")),
    ("hours-in-percent", changed('"6000 h/yr"', '"90 %"'), ("feed.operating_time", "h/yr")),
    ("pH-of-400-digits", changed("pH = 2.5", "pH = 1" + "0" * 400), ("feed.pH", "outside")),
    ("pH-nan", changed("pH = 2.5", "pH = nan"), ("feed.pH", "outside")),
    ("number-of-5000-digits", "a = " + "9" * 5000, ("beyond",)),
    ("lists-5000-deep", "a = " + "[" * 5000 + "]" * 5000, ("beyond",)),
    ("key-twice", changed("[feed]", 'title = "again"\n[feed]'), ("valid TOML",)),
    ("assay-in-two-names", changed('Zn = "60', '"Cu+2" = "5 mg/L"\nZn = "60'),
     ("feed.assay.Cu+2", "second time")),
    ("product-metal-twice", changed('["Cu"]', '["Cu", "Cu"]'), ("products[1].metals", "twice")),
    ("solid-allowed-and-forbidden", GOOD + '\n[solids]\nallow = ["goethite"]\n'
     'forbid = ["goethite"]\n', ("solids.forbid", "goethite")),
    ("limit-in-equivalents-of-two-ions", changed('Cu = "0.5 mg/L"', 'Fe = "1 meq/L"'),
     ("effluent.dissolved.Fe", "charge")),
    ("formula-of-a-half-oxidised-sulfur", changed('"Ca(OH)2"', '"Na2S2O3"'),
     ("reagents.lime.formula", "neutral")),
    ("formula-of-endless-atoms", changed('"Ca(OH)2"', '"Ca(OH)' + "9" * 400 + '"'),
     ("reagents.lime.formula", "atoms")),
    ("train-two-setpoints", changed("[oxidants.peroxide]", "[reagents.soda]\nformula = 'NaOH'\n"
     "supply = 'solution'\nstrength = '50 %'\nprice = '310 USD/t'\n\n[oxidants.peroxide]").replace(
         '{ lime = "pH 9.0" }', '{ lime = "pH 9.0", soda = "pH 9.5" }'),
     ("train[1].reagents", "twice")),
    ("train-empty-stage", GOOD + "\n[[train]]\ncake = 'waste'\n", ("train[2]", "adds nothing")),
    ("train-typo", changed('oxidant = "peroxide"', 'oxidnat = "peroxide"'),
     ("train[1].oxidnat", "oxidant")),
    ("unknown-table", GOOD + "\n[recycles]\n", ("recycles",)),
    ("charge-far-out", changed('Na = "100 mg/L"', 'Na = "2 g/L"'), ("feed.assay", "% out")),
    ("closing-ion-cannot", changed('closing_ion = "SO4"', 'closing_ion = "Zn"').replace(
        'SO4 = "720 mg/L"', 'SO4 = "430 mg/L"\nCl = "1 mg/L"'), ("feed",)),
]  # fmt: skip
