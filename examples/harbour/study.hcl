# Turbidity of an imaginary harbour: the data are invented (see README.md
# beside this).

study {
  title = "Turbidity of the harbour (invented data)"
  owner = "Harbour survey"
}

let {
  limit = 20                        # NTU: above it the fish quay stops its pumps
}

input "samples" {
  file    = "data/20*.csv"          # one file a calendar year
  missing = ["", "NA"]
  columns = {
    station   = text
    sampled   = date
    tide      = text
    meter     = text
    bottles   = number              # in the sample
    turbidity = number("NTU")       # their mean
    note      = text
  }
  expect "one sample a station and day" { unique = [station, sampled] }
  expect "bottles were filled"          { that = bottles >= 1 }
}

rows "usable" {
  from = samples
  drop "ship passing" {
    when   = note == "ship passing"
    reason = "a passing ship stirs the bed for minutes; the sample tells nothing of the station (plan 3.2)"
  }
  drop "fouled" {
    when   = note == "fouled"
    reason = "growth on the meter's window, found when it was cleaned (plan 3.4)"
  }
}

curve "turbidity" {
  from     = usable
  response = turbidity
  along    = sampled
  by       = [station]
  weight   = bottles                # a mean of more bottles counts for more

  smoothness {
    rule       = gcv
    df_at_most = 24                 # two bends a month; faster ones are weather
  }
  smoothness "twice a week" {
    only   = station == "Lock Gate"
    rule   = reml
    reason = "sampled twice a week only; in small groups cross-validation now and then takes a wiggly curve (plan 4.1)"
  }

  grid { step = 7 }

  tolerance {
    half_widths = 1                 # within the accepted band is no news
    readings    = { autumn = 0.5 }  # NTU
  }

  reading "peak"   { maximum = true }
  reading "autumn" { mean    = ["2025-10-01", "2025-11-30"] }
  reading "over_limit" {
    crosses   = limit
    direction = rising
  }
}

contrast "basin" {
  of     = turbidity
  across = station
  minus  = ["Inner Basin", "Breakwater"]
}

guard "a year of samples" {
  on        = turbidity
  require   = n >= 80 && distinct >= 80
  otherwise = skip
  reason    = "a year's curve needs a year's samples"
}
guard "autumn permit" {
  on        = turbidity
  require   = station == "Mud Berth" || autumn <= 15
  otherwise = warn
  reason    = "the permit asks for an autumn mean of at most 15 NTU, but of the mud berth"
}
guard "basin differs" {
  on        = basin
  require   = p_none < 0.01
  otherwise = warn
  reason    = "the basin is reported apart as long as it differs"
}
guard "samples are kept" {
  on        = study
  require   = share_dropped <= 0.05 && share_set_aside <= 0.05
  otherwise = refuse
  reason    = "more than that is a matter for the survey, not for a footnote"
}
guard "the year is there" {
  on        = samples
  require   = rows_read >= 1000
  otherwise = refuse
}

export "curves" {
  of   = turbidity
  what = grid
  file = "out/turbidity.csv"
}
export "fits" {
  of   = turbidity
  what = fits
  file = "out/fits.csv"
}
export "readings" {
  of   = turbidity
  what = readings
  file = "out/readings.csv"
}

report "year" {
  title = "Turbidity of the harbour, 2025"
  files = ["out/year.md", "out/year.html"]
}
