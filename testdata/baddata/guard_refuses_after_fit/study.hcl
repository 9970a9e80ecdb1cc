# A guard over the fit itself refuses.
study { title = "guard refuses after fit" }

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

guard "not straight" {
  on        = c
  require   = edf < 2
  otherwise = refuse
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
