post() { # path, body, further options of curl
  local path=$1 body=$2; shift 2
  curl -sS --fail-with-body -H "Authorization: Bearer $TOKEN" -H "Content-Type: ${TYPE:-application/json}" \
    --data-binary "$body" "$@" "$URL/v1$path"
}
first() { sed -E "s/\"$1\":\[?\"([^\"]*).*/\n\1/; s/.*\n//"; } # the first value of a field
approved='{"decision":"approved"}'

# 1. A second person, who will approve.
post /people '{"code":"nils","name":"Nils Aune","roles":["signatory"]}' >/dev/null
NILS=$(post /tokens '{"person":"nils","label":"at his desk"}' | first secret)

# 2. Instrument and method. The anchors' published values come with the registry.
post /instruments '{"code":"EA1","name":"Elemental analyser, room 12"}' >/dev/null
post /methods '{"code":"C-solid","title":"δ13C of organic solids",
  "quantities":[{"quantity":"d13C","scale":"d13C-VPDB-LSVEC","model":{"drift":"linear","weights":"replicate"},
    "roles":[{"material":"IAEA-CH-7","role":"anchor"},{"material":"IAEA-CH-6","role":"anchor"},{"material":"USGS40","role":"control"}]}],
  "corrections":[{"name":"o17","state":"earlier","by":"acquisition software"}],
  "import":{"columns":{"name":"Name","time":"Time"},"quantities":[{"quantity":"d13C","raw":"d13C raw"}]},
  "approval":{"second_person":true}}' >/dev/null
TOKEN=$NILS post /methods/C-solid/decisions "$approved" -H 'If-Match: "1-0"' >/dev/null

# 3. What the client sent.
SAMPLE=$(post /samples '{"samples":[
  {"client":"Marsh survey","label":"reed 1","wanted":[{"scale":"d13C-VPDB-LSVEC"}]},
  {"client":"Marsh survey","label":"reed 2","wanted":[{"scale":"d13C-VPDB-LSVEC"}]}]}' | first code)

# 4. The session, as the instrument's software exported it.
cat >run.csv <<'CSV'
Time,Name,d13C raw
2026-03-02T09:00:00Z,IAEA-CH-7,-32.142
2026-03-02T09:10:00Z,IAEA-CH-6,-10.269
2026-03-02T09:20:00Z,USGS40,-26.294
2026-03-02T09:30:00Z,reed 1,-27.409
2026-03-02T09:40:00Z,reed 2,-12.861
2026-03-02T09:50:00Z,IAEA-CH-7,-32.177
2026-03-02T10:00:00Z,IAEA-CH-6,-10.184
2026-03-02T10:10:00Z,IAEA-CH-7,-32.117
2026-03-02T10:20:00Z,reed 1,-27.394
2026-03-02T10:30:00Z,reed 2,-12.816
2026-03-02T10:40:00Z,USGS40,-26.314
2026-03-02T10:50:00Z,IAEA-CH-6,-10.239
2026-03-02T11:00:00Z,IAEA-CH-7,-32.091
2026-03-02T11:10:00Z,IAEA-CH-6,-10.189
CSV
SESSION=$(TYPE=text/csv post '/sessions/import?instrument=EA1&method=C-solid&name=run.csv' @run.csv | first code)

# 5. Fit: a draft calibration.  6. Approval, outcome, final value, report.
CALIBRATION=$(post "/sessions/$SESSION/calibrations" '{"quantity":"d13C"}' | first code)
TOKEN=$NILS post "/calibrations/$CALIBRATION/decisions" "$approved" -H 'If-Match: "1-0"' >/dev/null
post "/sessions/$SESSION/outcomes" '{"quantity":"d13C","outcome":"accepted"}' >/dev/null
FINAL=$(post /finals "{\"sample\":\"$SAMPLE\",\"scale\":\"d13C-VPDB-LSVEC\"}" | first code)
TOKEN=$NILS post "/finals/$FINAL/decisions" "$approved" -H 'If-Match: "1-0"' >/dev/null
REPORTED=$(TOKEN=$NILS post /reports "{\"client\":\"Marsh survey\",\"title\":\"δ13C of reed\",\"finals\":[\"$FINAL\"]}" | first codes)

# 7. Where the reported number comes from.
curl -sS --fail-with-body -H "Authorization: Bearer $TOKEN" -H 'Accept: text/plain' "$URL/v1/reported/$REPORTED/trace"
