# Columns that the spec does not list are not read: neither their bad numbers nor their double name matter.
study { title = "accepted unread column" }

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

report "page" {
  files = ["out/page.md"]
  show  = [c]
}
