/**
 * Follows the borders of control packets in an MQTT byte stream (MQTT 3.1.1 and 5, section 2.1: type, remaining
 * length of up to four bytes of seven bits, then that many bytes) without reading what is in them.
 */
export class PacketFollower {
  /** Bytes of the present packet still to come; null while its fixed header is being read. */
  #remaining: number | null = null;
  #type: number | null = null;
  #length = 0;
  #shift = 0;

  /**
   * @param chunk the next bytes of the stream
   * @param onPacket hears of each packet as soon as its length is known: type (section 2.1.2) and remaining length
   * @returns false where the bytes are no MQTT: a length of more than four bytes
   */
  follow(chunk: Uint8Array, onPacket: (type: number, length: number) => void): boolean {
    let at = 0;
    while (at < chunk.length) {
      if (this.#remaining !== null) {
        const passed = Math.min(this.#remaining, chunk.length - at);
        at += passed;
        this.#remaining -= passed;
        if (this.#remaining === 0) this.#remaining = null;
        continue;
      }
      const byte = chunk[at]!;
      at += 1;
      if (this.#type === null) {
        this.#type = byte >> 4;
        this.#length = 0;
        this.#shift = 0;
        continue;
      }
      this.#length += (byte & 127) * 2 ** this.#shift;
      this.#shift += 7;
      if (byte < 128) {
        onPacket(this.#type, this.#length);
        this.#remaining = this.#length === 0 ? null : this.#length;
        this.#type = null;
      } else if (this.#shift > 21) return false;
    }
    return true;
  }
}
