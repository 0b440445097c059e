package survey

import "testing"

func BenchmarkEpisode(b *testing.B) {
	for _, name := range []string{"pellmark", "skerrymoor", "brandersea"} {
		b.Run(name, func(b *testing.B) {
			p := newPlayer(network(b, name), Plan{Seed: 1, Episodes: 1000})
			i := 0
			for b.Loop() {
				if _, err := p.play(i); err != nil {
					b.Fatal(err)
				}
				i++
			}
			b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(i)/1200, "us/step")
		})
	}
}
