// An OPC UA client that shares no code with the server under test: node-opcua, watching one estimate.
//
//   node peer_client.js --modules DIR --pki DIR --endpoint URL --node "nsu=URI;s=IDENTIFIER"
//
// Prints a line of JSON for every change, with the value, its status code and the interval's properties, and goes on
// by itself when the server comes back. Ends when its standard input does.
"use strict";

const path = require("node:path");
const { createRequire } = require("node:module");
const { parseArgs } = require("node:util");

const { values: options } = parseArgs({
    options: {
        modules: { type: "string" },
        pki: { type: "string" },
        endpoint: { type: "string" },
        node: { type: "string" },
    },
});

const load = createRequire(path.join(options.modules, "package.json"));
const { OPCUAClient, AttributeIds, TimestampsToReturn, ClientSubscription, ClientMonitoredItem } =
    load("node-opcua-client");
const { OPCUACertificateManager } = load("node-opcua-certificate-manager");

async function main() {
    const certificates = new OPCUACertificateManager({
        rootFolder: options.pki,
        automaticallyAcceptUnknownCertificate: true,
    });
    await certificates.initialize();
    const client = OPCUAClient.create({
        clientCertificateManager: certificates,
        endpointMustExist: false,
        connectionStrategy: { initialDelay: 200, maxDelay: 1000, maxRetry: -1 },
        keepSessionAlive: true,
    });
    await client.connect(options.endpoint);
    const session = await client.createSession();
    const [, uri, identifier] = options.node.match(/^nsu=([^;]*);(.*)$/);
    const namespaces = await session.readNamespaceArray();
    const nodeId = `ns=${namespaces.indexOf(uri)};${identifier}`;
    const subscription = ClientSubscription.create(session, {
        requestedPublishingInterval: 100,
        requestedLifetimeCount: 1000,
        requestedMaxKeepAliveCount: 10,
        maxNotificationsPerPublish: 0,
        publishingEnabled: true,
        priority: 1,
    });
    const item = ClientMonitoredItem.create(
        subscription,
        { nodeId, attributeId: AttributeIds.Value },
        { samplingInterval: 50, queueSize: 100, discardOldest: true },
        TimestampsToReturn.Both,
    );
    item.on("changed", async (data) => {
        const names = ["StandardDeviation", "Lower95", "Upper95"];
        const properties = await session
            .read(names.map((name) => ({ nodeId: `${nodeId}.${name}`, attributeId: AttributeIds.Value })))
            .catch(() => []);
        process.stdout.write(
            `${JSON.stringify({
                value: data.value.value,
                status: data.statusCode.value,
                time: data.sourceTimestamp ? data.sourceTimestamp.toISOString() : null,
                interval: properties.map((each) => each.value.value),
            })}\n`,
        );
    });
    process.stdin.on("end", () => process.exit(0));
    process.stdin.resume();
}

main().catch((error) => {
    process.stderr.write(`${error.stack}\n`);
    process.exit(1);
});
