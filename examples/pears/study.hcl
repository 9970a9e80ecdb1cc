# Firmness of stored pears: the data are invented (see README.md beside this).

study {
  title = "Firmness of stored pears (invented data)"
  owner = "Cold-store trials"
  seed  = 4711                      # k-fold draws its folds from it
}

let {
  release = 18                      # N: below it a lot must leave the store
  scale   = 100                     # N: the gauge shows no more
}

input "readings" {
  file    = "data/readings-*.csv"   # one file a calendar year
  missing = ["", "NA"]
  columns = {
    lot      = text
    cultivar = text
    store    = text
    picked   = date
    visited  = date
    day      = number("d")          # days in store
    fruit    = number               # fruit pressed
    firmness = number("N")          # their mean
    sugar    = number("%")          # of the juice
    note     = text
  }
  expect "days are days"          { that = day >= 0 && day <= 400 }
  expect "days count from picking" { that = visited - picked == day }
  expect "fruit were pressed"     { that = !present(fruit) || fruit >= 1 }
  expect "one row a lot and day"  { unique = [lot, day] }
}

rows "usable" {
  from = readings
  drop "bruised" {
    when   = note == "bruised"
    reason = "bruised fruit give no firmness reading (trial protocol 4.2)"
  }
  drop "beyond the gauge" {
    when   = firmness > scale
    reason = "a decimal point was left out; the sheet cannot be asked again (protocol 4.5)"
  }
  add "log_firmness" {
    value = log(firmness)
    unit  = "log N"
  }
}

rows "whole_trial" {
  from = usable
  drop "not in every store" {
    when   = cultivar == "Pilot" || cultivar == "Hartley"
    reason = "a store's curve is taken over the cultivars that all three stores held"
  }
}

curve "firmness" {
  from     = usable
  response = firmness
  along    = day
  by       = [cultivar, store]
  weight   = fruit                  # a mean of more fruit counts for more

  smoothness { rule = gcv }
  smoothness "pilot lots" {
    only   = cultivar == "Pilot"
    rule   = fixed_df
    df     = 3
    reason = "four visits only; agreed with the trial board"
  }
  smoothness "drifting gauge" {
    only   = cultivar == "Dovecote" && store == "liner"
    rule   = fixed_df
    df     = 7
    reason = "the gauge drifted from day to day, so errors of near days are alike and cross-validation would follow them; 7 is what Aroma takes in the same liners"
  }

  band { level = 0.95 }
  grid { points = 101 }

  reading "release_day" {
    crosses   = release
    direction = falling
  }
  reading "softening_60"  { slope_at = 60 }
  reading "start"         { value_at = 0 }
  reading "peak"          { maximum  = true }
  reading "softest"       { minimum  = true }
  reading "exposure_0_60" { area = [0, 60] }
  reading "fastest" {
    steepest  = true
    direction = falling
  }
}

curve "sugar" {
  from     = usable
  response = sugar
  along    = visited                # a date as the x axis
  by       = [cultivar]
  smoothness {
    rule  = kfold                   # no folds given: each lot is left out in turn,
    block = lot                     # for a lot's fruit share their sugar
  }
  grid { step = 7 }
  reading "midwinter" { value_at = "2025-12-21" }
  reading "sweetening" { surely = rising }
  reading "sweetest"  { maximum = true }
}

curve "softening" {
  from     = whole_trial
  response = log_firmness
  along    = day
  by       = [store]
  weight   = fruit
  smoothness {
    rule       = reml
    df_at_most = 12
  }
  band {
    level = 0.9
    for   = new_reading
  }
  grid { at = [0, 30, 60, 90, 120, 150, 180, 210] }
  reading "at_30_newton" {
    crosses   = 3.4012              # log(30)
    direction = falling
    all       = true
  }
  reading "rate_90"    { slope_at = 90 }
  reading "winter"     { mean     = [60, 120] }
  reading "winter_fall" { change  = [60, 120] }
}

contrast "store_effect" {
  of     = firmness
  across = store
  minus  = ["air", "low_oxygen"]    # air minus low_oxygen, for each cultivar
}

guard "enough" {
  on        = firmness
  require   = cultivar == "Pilot" || n >= 8 && distinct >= 6
  otherwise = skip
  reason    = "fewer visits cannot support a curve; the pilot lots have a rule of their own"
}
guard "no wiggle" {
  on        = firmness
  require   = edf <= n / 5
  otherwise = warn
  reason    = "softening has one or two bends; more degrees of freedom ask for a look"
}
guard "several lots" {
  on        = sugar
  require   = distinct >= 6
  otherwise = skip
  reason    = "one lot, seen five times, cannot be left out of itself"
}
guard "store curves stand" {
  on        = softening
  require   = n >= 500 && !few_distinct
  otherwise = refuse
  reason    = "the store curves are published; half a season must not pass for a whole one"
}

export "store_tests" {
  of   = store_effect
  what = tests                      # do the stores differ, and do they run parallel?
  file = "out/store_effect_tests.csv"
}
export "grid" {
  of   = firmness
  what = grid
  file = "out/firmness_grid.csv"
}
export "fits" {
  of   = firmness
  what = fits
  file = "out/firmness_fits.csv"
}
export "readings_out" {
  of   = firmness
  what = readings
  file = "out/firmness_readings.csv"
}
export "evidence" {
  of   = firmness
  what = evidence
  file = "out/firmness_evidence.csv"
}
export "residuals" {
  of   = firmness
  what = residuals
  file = "out/firmness_residuals.csv"
}
export "coefficients" {
  of   = firmness
  what = coefficients
  file = "out/firmness_coefficients.csv"
}
export "difference" {
  of   = store_effect
  what = grid
  file = "out/store_effect_grid.csv"
}
export "sugar_grid" {
  of   = sugar
  what = grid
  file = "out/sugar_grid.csv"
}
export "softening_readings" {
  of   = softening
  what = readings
  file = "out/softening_readings.csv"
}

report "weekly" {
  title = "Pear firmness, week by week"
  files = ["out/weekly.md", "out/weekly.html"]
  show  = [firmness, store_effect, sugar, softening]
}
