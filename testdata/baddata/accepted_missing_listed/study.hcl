# NA, the empty cell and -999 are listed as missing; the rows are set aside.
study { title = "accepted missing listed" }

input "rows_read" {
  file    = "data.csv"
  missing = ["", "NA", "-999"]
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

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
