/** Entry of the command. */
export {};
