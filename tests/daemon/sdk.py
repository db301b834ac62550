"""Sends spans and histograms by the OpenTelemetry SDK and its OTLP exporter over HTTP (protocol buffers)."""

import sys
import time

from opentelemetry.exporter.otlp.proto.http import Compression
from opentelemetry.exporter.otlp.proto.http.metric_exporter import OTLPMetricExporter
from opentelemetry.exporter.otlp.proto.http.trace_exporter import OTLPSpanExporter
from opentelemetry.sdk.metrics import Histogram, MeterProvider
from opentelemetry.sdk.metrics.export import AggregationTemporality, PeriodicExportingMetricReader
from opentelemetry.sdk.metrics.view import ExponentialBucketHistogramAggregation, ExplicitBucketHistogramAggregation
from opentelemetry.sdk.resources import Resource
from opentelemetry.sdk.trace import TracerProvider
from opentelemetry.sdk.trace.export import BatchSpanProcessor
from opentelemetry.trace import SpanKind, Status, StatusCode

server = sys.argv[1]
resource = Resource.create({"service.name": "fernhollow.desk"})

traces = TracerProvider(resource=resource)
traces.add_span_processor(BatchSpanProcessor(OTLPSpanExporter(f"{server}/v1/traces", compression=Compression.Gzip)))
tracer = traces.get_tracer("fernhollow")


def span(**attributes):
    return tracer.start_as_current_span("loan", kind=SpanKind.CLIENT, attributes=attributes)


for again in range(3):
    with span(**({"http.request.resend_count": again} if again else {})):
        time.sleep(0.002)
with span(**{"error.type": "500"}) as failed:
    failed.set_status(Status(StatusCode.ERROR))
with span(**{"error.type": "timeout"}) as late:
    late.set_status(Status(StatusCode.ERROR))
with span(**{"rpc.system": "grpc", "rpc.grpc.status_code": 1}) as cancelled:
    cancelled.set_status(Status(StatusCode.ERROR))
traces.shutdown()

kinds = {"explicit": ExplicitBucketHistogramAggregation(), "exponential": ExponentialBucketHistogramAggregation()}
for temporality in (AggregationTemporality.DELTA, AggregationTemporality.CUMULATIVE):
    for kind, aggregation in kinds.items():
        exporter = OTLPMetricExporter(
            f"{server}/v1/metrics",
            compression=Compression.Gzip if kind == "explicit" else Compression.NoCompression,
            preferred_temporality={Histogram: temporality},
            preferred_aggregation={Histogram: aggregation},
        )
        reader = PeriodicExportingMetricReader(exporter, export_interval_millis=60_000)
        meters = MeterProvider(resource=resource, metric_readers=[reader])
        name = f"{kind}.{temporality.name.lower()}"
        waits = meters.get_meter("fernhollow").create_histogram(name, unit="ms")
        for wait in (0, 3, 20, 700):
            waits.record(wait)
        meters.force_flush()
        for wait in (4, 5):
            waits.record(wait)
        meters.get_meter("fernhollow").create_counter("loans").add(3)
        meters.shutdown()
