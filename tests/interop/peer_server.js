// An OPC UA server that shares no code with the one under test: node-opcua, with values that change all the time.
//
//   node peer_server.js --modules DIR --pki DIR --port N --namespaces URI,URI,... [--without TAG,TAG]
//
// The namespaces are registered in the order given, the plant's own (PLANT below) among them, so that its index differs
// from one start to the next. Prints one line, READY and that index, when clients may connect; ends when its standard
// input does, so that it never outlives the test that started it.
"use strict";

const path = require("node:path");
const { createRequire } = require("node:module");
const { parseArgs } = require("node:util");

const { values: options } = parseArgs({
    options: {
        modules: { type: "string" },
        pki: { type: "string" },
        port: { type: "string" },
        namespaces: { type: "string" },
        without: { type: "string", default: "" },
    },
});

const load = createRequire(path.join(options.modules, "package.json"));
const { OPCUAServer } = load("node-opcua-server");
const { OPCUACertificateManager } = load("node-opcua-certificate-manager");
const { StatusCode, StatusCodes } = load("node-opcua-status-code");
const { DataType } = load("node-opcua-variant");
const { standardUnits } = load("node-opcua-data-access");

const PLANT = "urn:example:peer-plant";

// Part 4, 7.39: bits 10-11 = 01 say that the code belongs to a data value, bits 8-9 are the limit.
const DATA_VALUE = 0x0400;
const LIMIT_HIGH = 0x0200;
const LIMIT_LOW = 0x0100;

const tags = [
    { name: "GOOD", period: 50, status: StatusCodes.Good },
    { name: "FAST", period: 60, status: StatusCodes.Good },
    { name: "BAD", period: 80, status: StatusCodes.BadSensorFailure },
    { name: "UNCERTAIN", period: 90, status: StatusCodes.UncertainSensorNotAccurate },
    { name: "HIGH", period: 100, status: StatusCode.makeStatusCode(StatusCodes.Good, DATA_VALUE | LIMIT_HIGH) },
    {
        name: "LOW",
        period: 100,
        status: StatusCode.makeStatusCode(StatusCodes.UncertainEngineeringUnitsExceeded, DATA_VALUE | LIMIT_LOW),
    },
];

function serveTag(namespace, folder, tag) {
    const variable = namespace.addAnalogDataItem({
        componentOf: folder,
        browseName: tag.name,
        nodeId: `s=R210.${tag.name}`,
        dataType: "Double",
        engineeringUnits: standardUnits.degree_celsius,
        engineeringUnitsRange: { low: 0, high: 1e9 },
        minimumSamplingInterval: 0,
    });
    let count = 0;
    const change = () => {
        count += 1;
        variable.setValueFromSource({ dataType: DataType.Double, value: count }, tag.status, new Date());
    };
    change();
    setInterval(change, tag.period);
}

async function main() {
    const certificates = new OPCUACertificateManager({
        rootFolder: options.pki,
        automaticallyAcceptUnknownCertificate: true,
    });
    await certificates.initialize();
    const server = new OPCUAServer({
        port: Number(options.port),
        hostname: "127.0.0.1",
        serverCertificateManager: certificates,
        userCertificateManager: certificates,
        allowAnonymous: true,
    });
    await server.initialize();
    const space = server.engine.addressSpace;
    for (const uri of options.namespaces.split(",")) {
        space.registerNamespace(uri);
    }
    const namespace = space.registerNamespace(PLANT);
    const folder = namespace.addFolder("ObjectsFolder", { browseName: "R-210" });
    const left = options.without.split(",");
    for (const tag of tags.filter((each) => !left.includes(each.name))) {
        serveTag(namespace, folder, tag);
    }
    await server.start();
    process.stdin.on("end", () => process.exit(0));
    process.stdin.resume();
    process.stdout.write(`READY ${namespace.index}\n`);
}

main().catch((error) => {
    process.stderr.write(`${error.stack}\n`);
    process.exit(1);
});
