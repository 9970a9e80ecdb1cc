study {
  title = "Lamps (invented)"
}
let { limit = 70 }
input "lamps" {
  file    = "lamps.csv"
  columns = {
    batch  = text
    hours  = number("h")
    output = number("%")
    made   = date
    weight = number
  }
}
rows "good" {
  from = lamps
  add "log_output" { value = log(output) }
  drop "dead" {
    when   = output <= 0
    reason = "a dead lamp gives no output"
  }
}
curve "ageing" {
  from     = good
  response = output
  along    = made
  by       = [batch]
  smoothness { rule = gcv }
  reading "half" { crosses = limit }
}
guard "enough" {
  on        = ageing
  require   = half < 900 # want: a date < a number && the same type on both sides of <
  otherwise = warn
}
export "grid" {
  of   = ageing
  what = grid
  file = "out/grid.csv"
}
report "page" { files = ["out/page.html"] }
