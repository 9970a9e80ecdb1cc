study {
  title = "Firmness of stored pears"
  owner = "Cold-store trials"
  seed  = 4711                      # only k-fold and simulation use it
}

input "readings" {
  file    = "data/readings.csv"     # .csv .tsv, also .gz; more formats later
  missing = ["", "NA"]
  columns = {
    lot      = text
    cultivar = text
    store    = text
    day      = number("d")          # the unit is carried to axes, tables and ledger
    firmness = number("N")
    fruit    = number
    picked   = date                 # ISO 8601; a date may be an x axis
    note     = text
  }
  expect "days are days" { that = day >= 0 && day <= 400 }
  expect "one row a lot and day" { unique = [lot, day] }
}

rows "usable" {
  from = readings
  add "log_firmness" { value = log(firmness) }
  drop "bruised" {
    when   = note == "bruised"
    reason = "bruised fruit give no firmness reading (trial protocol 4.2)"
  }
}

curve "firmness" {
  from     = usable
  response = firmness
  along    = day
  by       = [cultivar, store]
  weight   = fruit                  # prior weights: variance of a row is sigma^2 / weight

  smoothness { rule = gcv }
  smoothness "pilot lots" {         # an exception, tried before the rule above; it must give a reason
    only   = cultivar == "Pilot"
    rule   = fixed_df
    df     = 4
    reason = "four visits only; agreed with the trial board"
  }

  band { level = 0.95 }
  grid { points = 101 }             # or: step = 1, or: at = [0, 30, 60]

  reading "release_day" {
    crosses   = 18
    direction = falling
  }
  reading "softening_60" { slope_at = 60 }
  reading "start"        { value_at = 0 }
  reading "peak"         { maximum  = true }
  reading "exposure_0_60" { area = [0, 60] }
}

contrast "store_effect" {
  of      = firmness
  across  = store
  minus   = ["air", "low_oxygen"]   # air minus low_oxygen, for each cultivar
}

guard "enough" {
  on        = firmness
  require   = n >= 8 && distinct >= 6
  otherwise = skip
  reason    = "fewer visits cannot support a curve"
}
guard "no wiggle" {
  on        = firmness
  require   = edf <= n / 3
  otherwise = warn
}

export "grid"     {
  of   = firmness
  what = grid
  file = "out/firmness_grid.csv"
}
report "weekly" {
  title = "Pear firmness, week by week"
  files = ["out/weekly.md", "out/weekly.html"]
  show  = [firmness, store_effect]
}
