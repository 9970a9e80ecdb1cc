# Two rows of one group and day.
study { title = "expect unique broken" }

input "rows_read" {
  file    = "data.csv"
  expect "one row a day" { unique = [g, x] }
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
