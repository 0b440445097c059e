package main

import (
	"regexp"

	"sockline/alerting/page"
	"sockline/sensors"
)

// basis is what the page says of this program.
func (d *daemon) basis() page.Basis {
	b, cfg := currentBuild(), d.current()
	out := page.Basis{
		Version: b.Version, Go: b.Go, Revision: b.Revision, Instance: d.instance, Started: seconds(sensors.At(d.started)),
		Configuration: withoutSecrets(string(cfg.Source)), ConfigurationHash: cfg.Hash, Method: method(),
	}
	if since := sensors.Instant(d.inForce.Load()); since != 0 {
		out.ConfigurationSince = seconds(since)
	}
	return out
}

// withoutSecrets is the text of a configuration as anybody on the page may read
// it. Passwords cannot stand in it, but names of accounts, and a line that was
// tried and commented out, can.
func withoutSecrets(text string) string {
	secret := regexp.MustCompile(`(?mi)^(\s*#?\s*"?(?:[a-z_]*(?:password|secret|token|passphrase)|username|client_id)"?\s*=\s*).*$`)
	inURL := regexp.MustCompile(`(?i)([a-z]+://)[^\s"'/@]*@`)
	return inURL.ReplaceAllString(secret.ReplaceAllString(text, `$1"(left out)"`), "$1(left out)@")
}

// method is how the program comes to what it says, and what it cannot see.
func method() []string {
	return []string{
		"Each mast's wind is averaged over some seconds; how far that may be from the mean wind follows from its turbulence in the ten minutes before.",
		"Between the masts the wind is worked out by optimal interpolation under a mixture of priors: quiet air, disturbed air, and many shapes of outflows and fronts, weighed by how well each explains what the masts read.",
		"Along each path the headwind is drawn many times from what that leaves open. The greatest fall and the greatest rise over pairs of observed points at most 4 km apart are taken in each draw; their median and their 5 % and 95 % points are told.",
		"An alert opens when a level is reached with the configured probability, becomes worse at once, and closes only after the level has been left for the configured hold.",
		"Ground farther than the configured reach from every live mast is not observed, whatever the weather, and is said to be so.",
		"It measures at mast height. An outflow that has not reached the ground is not seen at all, and what lies between masts may be missed.",
	}
}
