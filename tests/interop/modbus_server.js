// A Modbus/TCP server of modbus-serial with a table of holding registers, for the link to be tested against.
//
// The first line of standard input says port, device id and table size; each later line is an address and a count, or an
// address, the count 0 and words to put there, and is answered by the words held.  It ends with its standard input.
"use strict";

const readline = require("readline");
const { ServerTCP } = require("modbus-serial");

async function main() {
    const lines = readline.createInterface({ input: process.stdin })[Symbol.asyncIterator]();
    const { port, device_id: unitID, size } = JSON.parse((await lines.next()).value);
    const words = new Array(size).fill(0);
    const checked = (address) => {
        if (address >= size) throw Object.assign(new Error("no such register"), { modbusErrorCode: 2 });
        return address;
    };
    const server = new ServerTCP({
        getHoldingRegister: (address) => words[checked(address)],
        setRegister: (address, word) => { words[checked(address)] = word; },
    }, { host: "127.0.0.1", port, unitID });
    await new Promise((ready) => server.once("initialized", ready));
    process.stdout.write(`${JSON.stringify({ port })}\n`);
    for await (const line of lines) {
        const [address, count, ...put] = line.split(" ").map(Number);
        put.forEach((word, at) => { words[address + at] = word; });
        process.stdout.write(`${JSON.stringify(words.slice(address, address + (count || put.length)))}\n`);
    }
    process.exit(0);
}

main().catch((fault) => {
    process.stderr.write(`${fault.stack}\n`);
    process.exit(1);
});
