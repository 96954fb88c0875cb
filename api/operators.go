package api

import (
	"context"
	"net/http"
	"runtime"
	"strconv"
	"time"

	"github.com/labstack/echo/v4"
	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"github.com/prometheus/client_golang/prometheus/promhttp"

	"deltamoor/api/registry"
)

// metrics are what operators see of the server, in a registry of their own.
// Labels are bounded: the route's pattern, the method where it is a known one,
// the class of the status.
type metrics struct {
	own      *prometheus.Registry
	requests *prometheus.CounterVec
	seconds  *prometheus.HistogramVec
	running  prometheus.Gauge
}

func newMetrics(version string) *metrics {
	m := &metrics{own: prometheus.NewRegistry(),
		requests: prometheus.NewCounterVec(prometheus.CounterOpts{Name: "deltamoor_requests_total", Help: "Requests answered."}, []string{"route", "method", "status"}),
		seconds: prometheus.NewHistogramVec(prometheus.HistogramOpts{Name: "deltamoor_request_seconds", Help: "Time until a request was answered.",
			Buckets: []float64{.001, .005, .01, .05, .1, .5, 1, 5, 30, 120}}, []string{"route", "method"}),
		running: prometheus.NewGauge(prometheus.GaugeOpts{Name: "deltamoor_requests_running", Help: "Requests being answered."}),
	}
	build := prometheus.NewGauge(prometheus.GaugeOpts{Name: "deltamoor_build_info", Help: "Always 1.", ConstLabels: prometheus.Labels{"version": version, "go": runtime.Version()}})
	build.Set(1)
	m.own.MustRegister(m.requests, m.seconds, m.running, build, collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}))
	return m
}

func (m *metrics) seen(route, method string, status int, took time.Duration) {
	switch method {
	case http.MethodGet, http.MethodPost:
	default:
		method = "other"
	}
	m.requests.WithLabelValues(route, method, strconv.Itoa(status/100)+"xx").Inc()
	m.seconds.WithLabelValues(route, method).Observe(took.Seconds())
}

// readyTimeout bounds the question whether the database answers.
const readyTimeout = 3 * time.Second

// operators mounts what needs no sign-in: whether the process lives, whether it
// can serve, and its metrics. None of it tells anything of a laboratory.
func operators(e *echo.Echo, r *registry.Registry, m *metrics) {
	e.GET("/healthz", func(c echo.Context) error { return c.String(http.StatusOK, "alive\n") })
	e.GET("/readyz", func(c echo.Context) error {
		ctx, cancel := context.WithTimeout(c.Request().Context(), readyTimeout)
		defer cancel()
		done, err := r.Initialised(ctx)
		switch {
		case err != nil:
			return &registry.Error{Meaning: registry.Unavailable, Message: "the database does not answer", Err: err}
		case !done:
			return registry.Refuse(registry.Unavailable, "this registry is not initialised: run init")
		}
		return c.String(http.StatusOK, "ready\n")
	})
	e.GET("/metrics", echo.WrapHandler(promhttp.HandlerFor(m.own, promhttp.HandlerOpts{})))
}
