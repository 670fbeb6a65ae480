# Candidates (CSV from the server, best first) beside the truth of the demo.
#   awk -v truth=truth.csv -f compare.awk candidates.csv
function read_truth(   line, f, head, n, i) {
    getline line < truth
    n = split(line, head, ",")
    for (i = 1; i <= n; i++) place[head[i]] = i
    while ((getline line < truth) > 0) {
        split(line, f, ",")
        dips++
        dip_star[dips] = f[place["star"]]
        dip_mid[dips] = f[place["mid_time"]]
        dip_hours[dips] = f[place["duration_h"]]
    }
    close(truth)
}
function measured(value, digits) {
    return value == "" ? "-" : sprintf("%." digits "f", value)
}
function matches(star, mid,   i) {
    for (i = 1; i <= dips; i++)
        if (dip_star[i] == star && (mid - dip_mid[i]) ^ 2 < (dip_hours[i] / 48) ^ 2) {
            seen[i] = 1
            return 1
        }
    return 0
}
BEGIN {
    FS = ","
    read_truth()
    printf "%-9s %-10s %11s %7s %10s %9s %6s %6s  %s\n", "candidate", "star", "probability", "SNR", \
        "depth ppm", "hours", "marks", "looks", "truth"
}
{ sub(/\r$/, "") }
NR == 1 { for (i = 1; i <= NF; i++) at[$i] = i; next }
{
    real = matches($at["star"], $at["mid_time"])
    total++
    if ($at["probability"] >= 0.9) {
        likely++
        right += real
    }
    if (total <= 25)
        printf "%-9s %-10s %11.4f %7s %10s %9s %6d %6d  %s\n", $at["candidate"], $at["star"], \
            $at["probability"], measured($at["snr"], 1), measured($at["depth_ppm"], 0), \
            measured($at["duration_h"], 2), $at["marks"], $at["looks"], real ? "a dip" : "no dip"
}
END {
    for (i in seen) found++
    printf "\n%d candidates; %d at 0.9 or more, of which %d are dips of the truth. ", total, likely, right
    printf "%d of the %d dips in the truth are somewhere on the list.\n", found, dips
}
