# Turbidity at six stations of a harbour. The data are invented: see README.md.
study {
  title = "Turbidity at six stations of a harbour (invented data)"
  owner = "Harbour laboratory"
}

let { limit = 12 }                  # NTU: divers are told from here on

input "samples" {
  file    = "data/*.csv"            # one file a year
  missing = ["", "NA"]
  columns = {
    station    = text
    sampled    = date
    instrument = text
    turbidity  = number("NTU")
    tide       = text
    note       = text
  }
  expect "within the probe's scale" { that = !present(turbidity) || turbidity > 0 && turbidity <= 400 }
}

rows "kept" {
  from = samples
  drop "dredging" {
    when   = note == "dredging"
    reason = "dredging stirs up what the trend is not about (monitoring plan, 3.1)"
  }
  drop "end of scale" {
    when   = turbidity >= 400
    reason = "the probe reads 400 when it is fouled"
  }
}

curve "trend" {
  from     = kept
  response = turbidity
  along    = sampled
  by       = [station]

  smoothness {
    rule       = gcv
    df_at_most = 20
  }
  smoothness "gates" {
    only   = station == "sluice"
    rule   = reml
    reason = "the gates work for days at a time, so errors depend on each other; gcv would follow them"
  }

  band { kind = simultaneous }
  grid { step = 7 }

  reading "worst"        { maximum = true }
  reading "over_limit" {
    crosses   = limit
    direction = rising
  }
  reading "autumn"       { mean   = ["2025-09-01", "2025-11-30"] }
  reading "autumn_rise"  { change = ["2025-09-01", "2025-11-01"] }

  tolerance {
    half_widths = 0.5
    readings    = { autumn = 0.5 }
  }
}

contrast "moles" {
  of     = trend
  across = station
  minus  = ["north mole", "south mole"]
}

guard "a peak one can believe" {
  on        = trend
  require   = worst < 40
  otherwise = warn
  reason    = "no station has been above 40 NTU without dredging"
}
guard "most samples count" {
  on        = study
  require   = share_dropped < 0.1 && share_set_aside < 0.05
  otherwise = refuse
  reason    = "a file with other notes must not pass for a clean year"
}

export "grid" {
  of   = trend
  what = grid
  file = "out/trend.csv"
}
export "readings" {
  of   = trend
  what = readings
  file = "out/readings.csv"
}
export "mole_tests" {
  of   = moles
  what = tests
  file = "out/moles.csv"
}
report "year" {
  title = "Turbidity, the year and what moved since"
  files = ["out/year.html", "out/year.md"]
}
