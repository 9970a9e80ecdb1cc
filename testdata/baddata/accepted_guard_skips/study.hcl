# A guard skips the small group and says so.
study { title = "accepted guard skips" }

input "rows_read" {
  file    = "data.csv"
  columns = {
    g = text
    x = number("d")
    y = number("N")
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  smoothness { rule = gcv }
}

guard "enough" {
  on        = c
  require   = n >= 8
  otherwise = skip
  reason    = "a curve of record needs as many readings"
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
