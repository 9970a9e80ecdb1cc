# missing lists NA alone, so the empty cell is a mistake.
study { title = "number empty not missing" }

input "rows_read" {
  file    = "data.csv"
  missing = ["NA"]
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
