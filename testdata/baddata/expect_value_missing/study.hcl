# A condition that cannot be told is not met.
study { title = "expect value missing" }

input "rows_read" {
  file    = "data.csv"
  expect "days are days" { that = x >= 0 && x <= 400 }
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
